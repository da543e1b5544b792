"""The command line: outputs and exit statuses."""

from __future__ import annotations

import json
import subprocess
import sys

import pytest

import mixbridge
from mixbridge.cli import main

FORMULA = "honey ~ forage + feeding + altitude"


@pytest.fixture
def file(tmp_path):
    path = tmp_path / "honey.csv"
    mixbridge.demo.apiaries().to_csv(path, index=False)
    return str(path)


def check(file, *more):
    return main(["check", file, "--formula", FORMULA, "--unit", "apiary", *more])


def test_check_prints_the_screen_of_the_library(file, capsys):
    assert check(file, "--period", "season") == 0
    study = mixbridge.crosscheck(FORMULA, mixbridge.demo.apiaries(), unit="apiary", period="season")
    assert capsys.readouterr().out == f"{study}\n"


def test_check_reads_parquet_and_prints_the_record(tmp_path, capsys):
    pytest.importorskip("pyarrow")
    path = tmp_path / "honey.parquet"
    mixbridge.demo.apiaries().to_parquet(path)
    assert check(str(path), "--json", "--primary", "ml", "--confidence", "0.9") == 0
    record = json.loads(capsys.readouterr().out)
    assert record["primary"] == "ml"
    assert record["confidence"] == 0.9
    study = mixbridge.crosscheck(FORMULA, mixbridge.demo.apiaries(), unit="apiary")
    assert record["fits"]["ml"]["ratio"] == study.fit("ml").ratio


def test_routes_can_be_chosen(file, capsys):
    assert check(file, "--routes", "swamy_arora, within") == 0
    out = capsys.readouterr().out
    assert "swamy_arora" in out
    assert "nerlove" not in out


def test_demo_runs_and_saves_its_data(tmp_path, capsys):
    path = tmp_path / "demo.csv"
    assert main(["demo", "--save", str(path)]) == 0
    assert "Cross-check of honey ~ forage + feeding + altitude" in capsys.readouterr().out
    assert path.read_bytes() == mixbridge.demo.path().read_bytes()
    assert main(["demo", "--save", str(tmp_path / "nowhere" / "demo.csv")]) == 2
    assert "cannot write" in capsys.readouterr().err


@pytest.mark.parametrize(
    ("arguments", "message"),
    [
        (["--formula", "honey ~ forrage", "--unit", "apiary"], "Did you mean 'forage'"),
        (["--formula", "honey ~ forage", "--unit", "apiray"], "apiary"),
        (["--formula", "honey ~ forage", "--unit", "apiary", "--primary", "rmel"], "reml"),
        (["--formula", "honey ~ forage", "--unit", "apiary", "--confidence", "95"], "between 0 and 1"),
        (["--formula", "honey ~ forage", "--unit", "apiary", "--incomplete-rows", "refuse"], "refused"),
        (["--formula", "honey ~ __import__('os').getcwd()", "--unit", "apiary"], "log"),
        (["--formula", "honey ~ open('x')", "--unit", "apiary"], "log"),
        (["--formula", "honey ~ forage.to_csv('x')", "--unit", "apiary"], "log"),
    ],
)
def test_unusable_input_has_exit_status_two_and_says_what_to_do(file, capsys, arguments, message):
    assert main(["check", file, *arguments]) == 2
    captured = capsys.readouterr()
    assert captured.out == ""
    assert message in captured.err


def test_required_agreement_decides_the_exit_status(file, capsys):
    assert check(file, "--require", "forage=immaterial") == 0
    assert check(file, "--require", "forage=immaterial", "--require", "feeding=visible") == 1
    captured = capsys.readouterr()
    assert "swamy_arora: conflicting" in captured.err
    assert "Cross-check of" in captured.out
    assert check(file, "--require", "forage") == 2
    assert "TERM=CLASS" in capsys.readouterr().err
    assert check(file, "--require", "forage=perfect") == 2
    assert "immaterial" in capsys.readouterr().err


def test_a_missing_file_is_unusable_input(tmp_path, capsys):
    assert check(str(tmp_path / "none.csv")) == 2
    assert "none.csv" in capsys.readouterr().err


def test_help_teaches(capsys):
    for arguments in (
        ["--help"],
        ["check", "--help"],
        ["match", "--help"],
        ["rehearse", "--help"],
        ["demo", "--help"],
    ):
        with pytest.raises(SystemExit) as ended:
            main(arguments)
        assert ended.value.code == 0
        assert max(map(len, capsys.readouterr().out.split("\n"))) <= 110
    with pytest.raises(SystemExit) as ended:
        main(["check"])
    assert ended.value.code == 2


def test_module_runs_as_a_program():
    done = subprocess.run(
        [sys.executable, "-m", "mixbridge", "demo"], capture_output=True, text=True, check=False
    )
    assert done.returncode == 0
    assert done.stderr == ""
    assert "Invented data" in done.stdout


def test_match_reads_figures_and_says_what_is_compatible(file, tmp_path, capsys):
    fit = mixbridge.crosscheck(FORMULA, mixbridge.demo.apiaries(), unit="apiary").fit("swamy_arora")
    figures = tmp_path / "figures.toml"
    printed = {
        "b:feeding": f"{fit.coefficients['feeding']:.4f}",
        "se:feeding": f"{fit.standard_errors['feeding']:.4f}",
        "unit_variance": f"{fit.unit_variance:.3f}",
    }
    figures.write_text("".join(f'"{key}" = "{value}"\n' for key, value in printed.items()), encoding="utf-8")
    arguments = ["match", str(figures), file, "--formula", FORMULA, "--unit", "apiary", "--robust", "never"]
    assert main(arguments) == 0
    assert "swamy_arora" in capsys.readouterr().out
    figures.write_text('"b:feeding" = "7.77"\n"b:forage" = "1.23"\n', encoding="utf-8")
    assert main(arguments) == 1
    figures.write_text('"b:fodder" = "7.77"\n', encoding="utf-8")
    assert main(arguments) == 2


DESIGN = """
units = 20
sizes = { 3 = 10, 5 = 10 }
covariates = { dose = [1.0, 0.5], age = [0.0, 1.0] }
within_correlation = []

[truth]
coefficients = { dose = 0.3 }
icc = 0.4
"""


def test_a_design_is_rehearsed_from_a_file(tmp_path, capsys):
    path = tmp_path / "design.toml"
    path.write_text(DESIGN, encoding="utf-8")
    assert main(["rehearse", str(path), "--replicates", "200", "--seed", "3"]) == 0
    out = capsys.readouterr().out
    assert "dose" in out
    assert "200 replicates" in out
    assert callable(mixbridge.rehearse)
    design = mixbridge.rehearse.Design(units=20, sizes=4, covariates={"dose": (1.0, 0.5)})
    truth = mixbridge.rehearse.Truth(icc=0.3)
    assert "dose" in str(mixbridge.rehearse(design, truth, replicates=200, seed=1))


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("units = 20", "needs units and sizes"),
        ("units = 20\nsizes = 3\nwidth = 1", "has no 'width'"),
        ("units = 20\nsizes = { many = 3 }", "not a number of rows"),
        ("units = ", "cannot be read"),
        ("units = 20\nsizes = 3\n[truth]\nicc = 1.5", "icc"),
    ],
)
def test_an_impossible_design_has_exit_status_two(tmp_path, capsys, text, message):
    path = tmp_path / "design.toml"
    path.write_text(text, encoding="utf-8")
    assert main(["rehearse", str(path)]) == 2
    assert message in capsys.readouterr().err
