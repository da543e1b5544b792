"""Studies and records on which what is written is tested, each made once."""

import json
from functools import cache
from pathlib import Path

import numpy as np
import pandas as pd

import mixbridge

REFERENCE = Path(__file__).with_name("reference")
HONEY = "honey ~ forage + feeding + altitude"


@cache
def demo():
    return mixbridge.crosscheck(HONEY, mixbridge.demo.apiaries(), unit="apiary", period="season")


@cache
def yields():
    """Yields of dyestuff by batch (Davies 1947; see tests/reference/README.md)."""
    data = pd.read_csv(REFERENCE / "dyestuff.csv").rename(columns={"yield": "yields"})
    return mixbridge.crosscheck("yields ~ 1", data, unit="batch")


def panel(related, *, units=40, holes=False, scale=1.0, seed=5):
    """Four rows per unit; x goes with the unit effect as far as `related` says."""
    rng = np.random.default_rng(seed)
    unit = np.repeat(np.arange(units), 4)
    effect = scale * rng.normal(size=units)
    x = rng.normal(size=4 * units) + related * effect[unit]
    data = pd.DataFrame({"hive": unit, "x": x, "y": x + effect[unit] + rng.normal(size=4 * units)})
    return data.drop(index=range(0, 4 * units, 7)) if holes else data


def repelling():
    """Rows of an unbalanced panel that push the others of their unit away."""
    data = panel(0.0, holes=True, scale=0.0)
    data["y"] -= 0.9 * data.groupby("hive")["y"].transform("mean")
    return data


@cache
def at_zero():
    """An unbalanced panel whose unit variance is estimated as zero."""
    return mixbridge.crosscheck("y ~ x", repelling(), unit="hive")


STUDIES = {"demo": demo, "published": yields, "zero": at_zero}


@cache
def kept(name):
    return json.dumps(STUDIES[name]().to_dict())


def record_of(name):
    """Return a fresh record of one of the studies."""
    return json.loads(kept(name))
