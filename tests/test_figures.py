"""Figures: the numbers drawn are the study's, labels neither overlap nor leave the page, the same bytes each time."""

import itertools

import numpy as np
import pandas as pd
import pytest

import mixbridge

matplotlib = pytest.importorskip("matplotlib")

from mixbridge.report.figures import FIGURES, alternative, svg  # noqa: E402

FORMULA = "honey ~ forage + feeding + altitude"


@pytest.fixture(scope="module")
def study():
    return mixbridge.crosscheck(FORMULA, mixbridge.demo.apiaries(), unit="apiary", period="season")


def crowded():
    """Forty routes, forty terms, units with long and awkward names."""
    rng = np.random.default_rng(4)
    units, n = 70, 420
    unit = rng.integers(0, units, n)
    odd = ["a_$x^2$" + "y" * 200, "<b>&amp;</b>", "\u05d0\u05d1\u05d2 \u202ex", r"\frac{1}{2}", "100%"]
    keys = [odd[j] if j < len(odd) else f"unit {j}" for j in range(units)]
    data = pd.DataFrame(rng.normal(size=(n, 39)), columns=[f"covariate number {j} $_{j}$" for j in range(39)])
    data["outcome_$"] = data.iloc[:, 0] + rng.normal(size=units)[unit] + rng.normal(size=n)
    data["unit"] = np.array(keys, dtype=object)[unit]
    right = " + ".join(f"Q('{name}')" for name in data.columns[:39])
    priors = [f"minque_{prior}" for prior in np.round(np.linspace(0.1, 3, 30), 2)]
    routes = [
        "pooled",
        "within",
        "swamy_arora",
        "nerlove",
        "amemiya",
        "ml",
        "reml",
        "fitting_constants",
        *priors,
    ]
    return mixbridge.crosscheck(f"Q('outcome_$') ~ {right}", data, unit="unit", routes=routes)


def boxes_of(axes):
    figure = axes.get_figure(root=True)
    figure.canvas.draw()
    renderer = figure.canvas.get_renderer()
    found = []
    for part in figure.axes:
        texts = [part.title, part._left_title, part.xaxis.label, part.yaxis.label, *part.texts]
        texts += [t for t in part.get_yticklabels() if _inside(part.get_ylim(), t.get_position()[1])]
        shown = [t for t in part.get_xticklabels() if _inside(part.get_xlim(), t.get_position()[0])]
        texts += shown if part.xaxis.get_tick_params()["labelbottom"] else []
        if part.get_legend() is not None:
            texts += part.get_legend().get_texts()
        found += [
            (t.get_text(), t.get_window_extent(renderer)) for t in texts if t.get_visible() and t.get_text()
        ]
    return found, figure.bbox


def _inside(limits, value):
    return min(limits) <= value <= max(limits)


def check_labels(axes):
    found, page = boxes_of(axes)
    assert found
    for text, box in found:
        assert box.x0 >= -1, text
        assert box.x1 <= page.width + 1, text
        assert box.y0 >= -1, text
        assert box.y1 <= page.height + 1, text
    for (one, a), (two, b) in itertools.combinations(found, 2):
        wide = min(a.x1, b.x1) - max(a.x0, b.x0)
        high = min(a.y1, b.y1) - max(a.y0, b.y0)
        # boxes of lines hold room above and below the letters
        assert wide <= 1 or high <= 0.3 * min(a.height, b.height), (one, two)


@pytest.mark.parametrize("name", list(FIGURES))
def test_labels_neither_overlap_nor_leave_the_page(study, name):
    check_labels(study.figure(name))


@pytest.fixture(scope="module")
def many():
    return crowded()


@pytest.mark.parametrize("name", [name for name in FIGURES if name != "attribution"])
def test_forty_routes_and_terms_and_awkward_names(many, name):
    check_labels(many.figure(name))


def test_attribution_with_a_long_name(many):
    check_labels(many.figure("attribution", a="swamy_arora"))


@pytest.mark.parametrize("name", list(FIGURES))
def test_the_same_bytes_each_time_and_text_kept_as_text(study, name):
    first = svg(study, name)
    assert svg(study, name) == first
    assert "<text" in first
    assert "dc:date" not in first


@pytest.mark.parametrize("name", list(FIGURES))
def test_alternative_in_words_has_numbers_and_flips_with_the_data(study, name):
    text = alternative(study, name)
    assert sum(character.isdigit() for character in text) > 5
    other = mixbridge.crosscheck(
        FORMULA, mixbridge.demo.apiaries().iloc[:200], unit="apiary", period="season"
    )
    assert alternative(other, name) != text


def test_settings_of_the_process_stay(study):
    before = dict(matplotlib.rcParams)
    study.figure("path")
    assert dict(matplotlib.rcParams) == before


def test_ledger_draws_the_estimates(study):
    axes = study.figure("ledger", term="forage")
    rows = study.ledger[study.ledger["term"] == "forage"]
    drawn = sorted(float(line.get_xdata()[0]) for line in axes.lines if len(line.get_xdata()) == 1)
    np.testing.assert_allclose(drawn, sorted(rows["estimate"].dropna()))


def test_path_draws_every_route_at_its_place(study):
    axes = study.figure("path", term="feeding")
    routes = study.path("feeding").routes
    drawn = [
        pair
        for line in axes.lines
        if line.get_linestyle() == "None"
        for pair in zip(line.get_xdata(), line.get_ydata(), strict=True)
    ]
    np.testing.assert_allclose(
        sorted(drawn), sorted(zip(routes["weight"], routes["coefficient"], strict=True))
    )


def test_waterfall_ends_at_both_estimates(study):
    axes = study.figure("attribution", term="feeding", a="swamy_arora")
    found = study.attribution("feeding", "swamy_arora")
    ends = [float(line.get_xdata()[0]) for line in axes.lines if len(line.get_xdata()) == 1]
    np.testing.assert_allclose(ends, [found.gap.estimate_b, found.gap.estimate_a])
    widths = [patch.get_width() for patch in axes.patches]
    np.testing.assert_allclose(sum(widths), found.gap.estimate_a - found.gap.estimate_b, rtol=1e-9)


def test_scatter_has_the_slopes_of_within_and_between(study):
    """Least squares on the points drawn gives back the slope: they are partial residuals."""
    axes = study.figure("within_between", term="feeding")
    x, y = axes.lines[0].get_data()
    np.testing.assert_allclose((x @ y) / (x @ x), study.fit("within").coefficients["feeding"], rtol=1e-9)


def test_drawn_on_a_given_axes(study):
    figure = matplotlib.figure.Figure()
    axes = figure.subplots()
    assert study.figure("ledger", ax=axes) is axes
    assert study.figure("path", ax=figure.add_subplot()) in figure.axes


def test_units_can_be_hidden(study):
    axes = study.figure("leave_one_out", names=False)
    assert all(tick.get_text().startswith("unit ") for tick in axes.get_yticklabels())
    assert "A02" not in alternative(study, "leave_one_out", names=False)
    assert "A28" not in alternative(study, "effects", names=False)


@pytest.mark.parametrize(
    ("name", "options", "match"),
    [
        ("pie", {}, "figure"),
        ("ledger", {"colour": "red"}, "no option 'colour'"),
        ("ledger", {"term": "honey"}, "term"),
        ("within_between", {"term": "altitude"}, "term"),
    ],
)
def test_what_cannot_be_drawn_is_refused(study, name, options, match):
    with pytest.raises(mixbridge.OptionError, match=match):
        study.figure(name, **options)


def test_without_rows_or_with_one_size_the_reason_is_given(study):
    away = mixbridge.from_moments(study.moments, unit="apiary")
    with pytest.raises(mixbridge.DataError, match="rows are not at hand"):
        away.figure("within_between")
    data = pd.DataFrame(
        {"u": np.repeat(range(6), 3), "x": np.arange(18.0) % 5, "y": np.arange(18.0) ** 1.1 % 7}
    )
    balanced = mixbridge.crosscheck("y ~ x", data, unit="u")
    with pytest.raises(mixbridge.OptionError, match="all units have 3 rows"):
        balanced.figure("weights")
    check_labels(balanced.figure("ledger"))


def test_zero_unit_variance_is_drawn():
    rng = np.random.default_rng(2)
    unit = np.repeat(np.arange(20), 4)
    y = rng.normal(size=80)
    data = pd.DataFrame({"unit": unit, "x": rng.normal(size=80), "y": y})
    data["y"] -= 0.9 * data.groupby("unit")["y"].transform("mean")
    study = mixbridge.crosscheck("y ~ x", data, unit="unit")
    assert study.fit("reml").ratio == 0.0
    for name in ("ledger", "path", "effects", "leave_one_out"):
        check_labels(study.figure(name))
