"""Imports run in one direction, and importing the package stays cheap."""

import subprocess
import sys
from pathlib import Path

import layering
import pytest

ROOT = Path(__file__).parents[1]


def package(directory: Path, **files: str) -> Path:
    """Write a package of one-line files; a double underscore in a name stands for a directory."""
    root = directory / "mixbridge"
    for name, text in {"__init__": "", **files}.items():
        file = root / (name if name.startswith("__") else name.replace("__", "/", 1))
        file = file.with_suffix(".py")
        file.parent.mkdir(parents=True, exist_ok=True)
        file.write_text(text, encoding="utf-8")
    return root


def test_imports_of_the_package_run_in_one_direction():
    assert layering.problems(ROOT / "mixbridge") == []


@pytest.mark.parametrize(
    ("files", "word"),
    [
        ({"panel": "from mixbridge.study import Study", "study": ""}, "later layer study"),
        ({"panel": "def f():\n    from . import study", "study": ""}, "later layer study"),
        ({"panel": "import mixbridge.study", "study": ""}, "later layer study"),
        ({"routes__a": "from mixbridge.routes import b", "routes__b": "from .a import x"}, "circle"),
        ({"routes__a": "from ..study import x", "study": ""}, "later layer study"),
        ({"panel": "from mixbridge import crosscheck"}, "the package itself"),
        ({"helpers": ""}, "not listed"),
        ({"panel": "if TYPE_CHECKING:\n    from mixbridge.cli import main", "cli": ""}, "later layer cli"),
    ],
)
def test_broken_rules_are_found(tmp_path, files, word):
    found = layering.problems(package(tmp_path, **files))
    assert len(found) == 1
    assert word in found[0]


def test_earlier_layers_and_neighbours_may_be_imported(tmp_path):
    files = {
        "__init__": "from mixbridge.study import Study",
        "study": "from mixbridge.routes import a\nimport numpy",
        "routes__a": "from mixbridge.errors import DataError\nfrom .b import x",
        "routes__b": "from ..errors import DataError",
        "errors": "",
    }
    assert layering.problems(package(tmp_path, **files)) == []


def test_import_leaves_heavy_optional_packages_alone():
    heavy = (
        "statsmodels",
        "matplotlib",
        "pyarrow.parquet",
        "duckdb",
        "dask",
        "scipy.stats",
        "scipy.optimize",
    )
    code = f"import sys, mixbridge; print([name for name in {heavy} if name in sys.modules])"
    done = subprocess.run([sys.executable, "-c", code], capture_output=True, text=True, check=True)
    assert done.stdout.strip() == "[]"
