"""The invented data: made by the script that stands beside them, and as the script's description says."""

import numpy as np
import pandas as pd

from mixbridge import demo
from mixbridge.demo import make


def test_the_shipped_file_is_what_the_script_makes():
    assert demo.path().read_text(encoding="utf-8") == make.as_csv()


def test_shape_is_what_the_description_says():
    data = demo.apiaries()
    assert tuple(data.columns) == make.HEADER
    assert data.isna().sum().to_dict() == dict.fromkeys(make.HEADER, 0) | {"honey": 4, "forage": 3}
    assert not data.duplicated(["apiary", "season"]).any()
    units = data.groupby("apiary")
    assert units.ngroups == 48
    assert (units.size().min(), units.size().max()) == (1, 9)
    assert (units.size() == 1).sum() >= 3
    assert (units["altitude"].nunique() == 1).all()
    gaps = units["season"].agg(lambda season: season.max() - season.min() + 1 > len(season))
    assert gaps.any()


def test_feeding_leans_on_quality_and_forage_does_not():
    """Slopes within and between apiaries by plain least squares, against the values of the description."""
    data = demo.apiaries().dropna()[["apiary", "honey", "forage", "feeding", "altitude"]]
    means = data.groupby("apiary").transform("mean")
    forage, feeding = slopes(data.drop(columns="apiary") - means, ["forage", "feeding"])
    # Three standard errors of the slopes: 0.15 for feeding, 0.03 for forage.
    assert abs(feeding - 0.90) < 0.45
    assert abs(forage - 0.20) < 0.09
    forage, feeding, _ = slopes(means - means.mean(), ["forage", "feeding", "altitude"])
    # Three standard errors again: 0.3 and 0.06, of the regression on 48 means.
    assert abs(feeding + 1.07) < 0.9
    assert abs(forage - 0.20) < 0.18


def slopes(data: pd.DataFrame, columns: list[str]) -> np.ndarray:
    return np.linalg.lstsq(data[columns].to_numpy(), data["honey"].to_numpy(), rcond=None)[0]
