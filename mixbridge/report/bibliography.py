"""The methods used in a study, as bibliography: BibTeX, CSL-JSON and plain lines.

Authors, years, titles, volumes and pages are from memory; equation numbers are not given here.
"""

from __future__ import annotations

import json
from collections.abc import Mapping
from dataclasses import dataclass
from typing import Any, Literal

from mixbridge.errors import OptionError

__all__ = ["WORKS", "Work", "bibliography", "cited", "study_references"]


@dataclass(frozen=True, slots=True)
class Work:
    """One work.

    Attributes
    ----------
    authors : tuple of (str, str)
        Family and given names.
    year : int
    title : str
    container : str
        Journal, or the publisher of a book.
    volume, pages : str
        Empty for books.
    book : bool
    """

    authors: tuple[tuple[str, str], ...]
    year: int
    title: str
    container: str
    volume: str = ""
    pages: str = ""
    book: bool = False

    @property
    def line(self) -> str:
        """The work as one line of plain text."""
        names = [f"{family}, {given}" for family, given in self.authors]
        who = " & ".join([", ".join(names[:-1]), names[-1]] if len(names) > 1 else names)
        where = self.container + (f" {self.volume}" if self.volume else "")
        pages = f", {self.pages}" if self.pages else ""
        return f"{who} ({self.year}). {self.title}. {where}{pages}."


ECONOMETRICA, BIOMETRIKA, BIOMETRICS = "Econometrica", "Biometrika", "Biometrics"
JOE, JASA = "Journal of Econometrics", "Journal of the American Statistical Association"

WORKS: Mapping[str, Work] = {
    "fuller_battese_1974": Work(
        (("Fuller", "W. A."), ("Battese", "G. E.")),
        1974,
        "Estimation of linear models with crossed-error structure",
        JOE,
        "2",
        "67-78",
    ),
    "swamy_arora_1972": Work(
        (("Swamy", "P. A. V. B."), ("Arora", "S. S.")),
        1972,
        "The exact finite sample properties of the estimators of coefficients in the error components "
        "regression models",
        ECONOMETRICA,
        "40",
        "261-275",
    ),
    "baltagi_chang_1994": Work(
        (("Baltagi", "B. H."), ("Chang", "Y.-J.")),
        1994,
        "Incomplete panels: a comparative study of alternative estimators for the unbalanced one-way "
        "error component "
        "regression model",
        JOE,
        "62",
        "67-89",
    ),
    "wansbeek_kapteyn_1989": Work(
        (("Wansbeek", "T."), ("Kapteyn", "A.")),
        1989,
        "Estimation of the error-components model with incomplete panels",
        JOE,
        "41",
        "341-361",
    ),
    "wallace_hussain_1969": Work(
        (("Wallace", "T. D."), ("Hussain", "A.")),
        1969,
        "The use of error components models in combining cross section with time series data",
        ECONOMETRICA,
        "37",
        "55-72",
    ),
    "amemiya_1971": Work(
        (("Amemiya", "T."),),
        1971,
        "The estimation of the variances in a variance-components model",
        "International Economic Review",
        "12",
        "1-13",
    ),
    "nerlove_1971": Work(
        (("Nerlove", "M."),),
        1971,
        "Further evidence on the estimation of dynamic economic relations from a time series of cross sections",
        ECONOMETRICA,
        "39",
        "359-382",
    ),
    "henderson_1953": Work(
        (("Henderson", "C. R."),),
        1953,
        "Estimation of variance and covariance components",
        BIOMETRICS,
        "9",
        "226-252",
    ),
    "rao_1971": Work(
        (("Rao", "C. R."),),
        1971,
        "Estimation of variance and covariance components: MINQUE theory",
        "Journal of Multivariate Analysis",
        "1",
        "257-275",
    ),
    "hartley_rao_1967": Work(
        (("Hartley", "H. O."), ("Rao", "J. N. K.")),
        1967,
        "Maximum-likelihood estimation for the mixed analysis of variance model",
        BIOMETRIKA,
        "54",
        "93-108",
    ),
    "patterson_thompson_1971": Work(
        (("Patterson", "H. D."), ("Thompson", "R.")),
        1971,
        "Recovery of inter-block information when block sizes are unequal",
        BIOMETRIKA,
        "58",
        "545-554",
    ),
    "harville_1977": Work(
        (("Harville", "D. A."),),
        1977,
        "Maximum likelihood approaches to variance component estimation and to related problems",
        JASA,
        "72",
        "320-338",
    ),
    "satterthwaite_1946": Work(
        (("Satterthwaite", "F. E."),),
        1946,
        "An approximate distribution of estimates of variance components",
        "Biometrics Bulletin",
        "2",
        "110-114",
    ),
    "liang_zeger_1986": Work(
        (("Liang", "K.-Y."), ("Zeger", "S. L.")),
        1986,
        "Longitudinal data analysis using generalized linear models",
        BIOMETRIKA,
        "73",
        "13-22",
    ),
    "breusch_pagan_1980": Work(
        (("Breusch", "T. S."), ("Pagan", "A. R.")),
        1980,
        "The Lagrange multiplier test and its applications to model specification in econometrics",
        "Review of Economic Studies",
        "47",
        "239-253",
    ),
    "honda_1985": Work(
        (("Honda", "Y."),),
        1985,
        "Testing the error components model with non-normal disturbances",
        "Review of Economic Studies",
        "52",
        "681-690",
    ),
    "wald_1947": Work(
        (("Wald", "A."),),
        1947,
        "A note on regression analysis",
        "Annals of Mathematical Statistics",
        "18",
        "586-589",
    ),
    "harville_fenech_1985": Work(
        (("Harville", "D. A."), ("Fenech", "A. P.")),
        1985,
        "Confidence intervals for a variance ratio, or for heritability, in an unbalanced mixed linear model",
        BIOMETRICS,
        "41",
        "137-152",
    ),
    "crainiceanu_ruppert_2004": Work(
        (("Crainiceanu", "C. M."), ("Ruppert", "D.")),
        2004,
        "Likelihood ratio tests in linear mixed models with one variance component",
        "Journal of the Royal Statistical Society, Series B",
        "66",
        "165-185",
    ),
    "hausman_1978": Work(
        (("Hausman", "J. A."),), 1978, "Specification tests in econometrics", ECONOMETRICA, "46", "1251-1271"
    ),
    "hausman_taylor_1981": Work(
        (("Hausman", "J. A."), ("Taylor", "W. E.")),
        1981,
        "Panel data and unobservable individual effects",
        ECONOMETRICA,
        "49",
        "1377-1398",
    ),
    "arellano_1993": Work(
        (("Arellano", "M."),),
        1993,
        "On the testing of correlated effects with panel data",
        JOE,
        "59",
        "87-97",
    ),
    "mundlak_1978": Work(
        (("Mundlak", "Y."),),
        1978,
        "On the pooling of time series and cross section data",
        ECONOMETRICA,
        "46",
        "69-85",
    ),
    "chamberlain_1982": Work(
        (("Chamberlain", "G."),),
        1982,
        "Multivariate regression models for panel data",
        JOE,
        "18",
        "5-46",
    ),
    "abrevaya_2013": Work(
        (("Abrevaya", "J."),),
        2013,
        "The projection approach for unbalanced panel data",
        "The Econometrics Journal",
        "16",
        "161-178",
    ),
    "wooldridge_2019": Work(
        (("Wooldridge", "J. M."),),
        2019,
        "Correlated random effects models with unbalanced panels",
        JOE,
        "211",
        "137-150",
    ),
    "guggenberger_2010": Work(
        (("Guggenberger", "P."),),
        2010,
        "The impact of a Hausman pretest on the size of a hypothesis test: the panel data case",
        JOE,
        "156",
        "337-343",
    ),
    "wooldridge_2010": Work(
        (("Wooldridge", "J. M."),),
        2010,
        "Econometric Analysis of Cross Section and Panel Data, 2nd edition",
        "MIT Press",
        book=True,
    ),
    "searle_casella_mcculloch_1992": Work(
        (("Searle", "S. R."), ("Casella", "G."), ("McCulloch", "C. E.")),
        1992,
        "Variance Components",
        "Wiley",
        book=True,
    ),
}
"""Every work that an output may cite, by key."""

_BY_ROUTE: Mapping[str, tuple[str, ...]] = {
    "swamy_arora": ("swamy_arora_1972", "baltagi_chang_1994"),
    "wansbeek_kapteyn": ("wansbeek_kapteyn_1989",),
    "wallace_hussain": ("wallace_hussain_1969", "baltagi_chang_1994"),
    "amemiya": ("amemiya_1971",),
    "nerlove": ("nerlove_1971",),
    "fitting_constants": ("henderson_1953",),
    "minque": ("rao_1971",),
    "ml": ("hartley_rao_1967",),
    "reml": ("patterson_thompson_1971", "harville_1977"),
}


def cited(record: Mapping[str, Any]) -> tuple[str, ...]:
    """Return the keys of the works whose methods a record shows, sorted by author and year.

    Parameters
    ----------
    record : mapping
        What `Study.to_dict` returns.
    """
    keys = {"fuller_battese_1974", "guggenberger_2010"}
    for route in record["fits"]:
        name = "minque" if route.startswith("minque") else route
        keys.update(_BY_ROUTE.get(name, ()))
    parts = {
        "inference": ("satterthwaite_1946",),
        "robust": ("liang_zeger_1986",),
        "variance_tests": ("breusch_pagan_1980", "honda_1985", "wald_1947", "crainiceanu_ruppert_2004"),
        "component_intervals": ("satterthwaite_1946", "harville_fenech_1985"),
        "contrasts": ("hausman_1978", "hausman_taylor_1981"),
        "contrasts_robust": ("arellano_1993",),
        "unit_means": ("mundlak_1978", "wooldridge_2019"),
        "audit": ("wooldridge_2010",),
    }
    for name, works in parts.items():
        if record[name]["status"] == "computed":
            keys.update(works)
    form = (record["added"] or {}).get("form")
    if form is not None:
        keys.update(_BY_FORM[form])
    return tuple(sorted(keys, key=lambda key: (WORKS[key].authors, WORKS[key].year)))


_BY_FORM: Mapping[str, tuple[str, ...]] = {
    "mundlak": ("mundlak_1978", "wooldridge_2019"),
    "chamberlain": ("chamberlain_1982", "abrevaya_2013"),
    "mundlak_sizes": ("mundlak_1978", "wooldridge_2019"),
    "mundlak_size_linear": ("mundlak_1978", "wooldridge_2019"),
}


def study_references(study: Any, form: Literal["bibtex", "csl"]) -> str:
    """Return the bibliography of a study.

    Parameters
    ----------
    study : Study
    form : {"bibtex", "csl"}

    Returns
    -------
    str
    """
    return bibliography(cited(study.to_dict()), form)


def bibliography(keys: tuple[str, ...], form: str) -> str:
    """Return works as BibTeX or as CSL in JSON.

    Parameters
    ----------
    keys : tuple of str
    form : {"bibtex", "csl"}
    """
    if form == "bibtex":
        return "\n\n".join(_bibtex(key, WORKS[key]) for key in keys) + "\n"
    if form == "csl":
        return json.dumps([_csl(key, WORKS[key]) for key in keys], indent=1, ensure_ascii=False) + "\n"
    raise OptionError.not_among("form", form, ("bibtex", "csl"))


def _bibtex(key: str, work: Work) -> str:
    fields = {
        "author": " and ".join(f"{family}, {given}" for family, given in work.authors),
        "year": str(work.year),
        "title": "{" + work.title + "}",
        ("publisher" if work.book else "journal"): work.container.replace("&", r"\&"),
        "volume": work.volume,
        "pages": work.pages.replace("-", "--"),
    }
    body = ",\n".join(f"  {name} = {{{value}}}" for name, value in fields.items() if value)
    return f"@{'book' if work.book else 'article'}{{{key},\n{body}\n}}"


def _csl(key: str, work: Work) -> dict[str, Any]:
    found: dict[str, Any] = {
        "id": key,
        "type": "book" if work.book else "article-journal",
        "author": [{"family": family, "given": given} for family, given in work.authors],
        "issued": {"date-parts": [[work.year]]},
        "title": work.title,
        ("publisher" if work.book else "container-title"): work.container,
    }
    if work.volume:
        found["volume"] = work.volume
    if work.pages:
        found["page"] = work.pages
    return found
