"""The methods text: what was done and what was not, from the provenance of a result."""

from __future__ import annotations

import re
from collections.abc import Iterator, Mapping
from functools import cache
from inspect import signature
from math import floor
from typing import Any

from jinja2 import Environment, PackageLoader, StrictUndefined
from markupsafe import Markup

from seedaudit.consensus.ceiling import LEAST_CEILING
from seedaudit.consensus.claims import LEVEL
from seedaudit.consensus.regional import CALL_SHARE
from seedaudit.consensus.resampling import SMALLEST_STRATUM, bootstrap_interval
from seedaudit.plan import cloud_size
from seedaudit.report import CAUTION
from seedaudit.report.words import (
    MEASURES,
    absent_words,
    distance_words,
    number,
    percent,
    plural,
    point,
    similarity,
)
from seedaudit.results import Audit, SeedAudit
from seedaudit.study import Cleaning, Placements

REFERENCES = {
    "lancaster": "Lancaster J.L. et al. (2007) *Hum. Brain Mapp.* 28:1194–1205.",
    "owen": "Owen A.B. (1998) *J. Complexity* 14:466–489.",
    "hallquist": "Hallquist M.N. et al. (2013) *NeuroImage* 82:208–225.",
    "lindquist": "Lindquist M.A. et al. (2019) *Hum. Brain Mapp.* 40:2358–2376.",
    "bartlett": "Bartlett M.S. (1946) *Suppl. J. R. Stat. Soc.* 8:27–41.",
    "dosenbach": "Dosenbach N.U.F. et al. (2010) *Science* 329:1358–1361.",
    "benjamini": "Benjamini Y. & Hochberg Y. (1995) *J. R. Stat. Soc. B* 57:289–300.",
    "nichols": "Nichols T. et al. (2005) *NeuroImage* 25:653–660.",
    "dice": "Dice L.R. (1945) *Ecology* 26:297–302.",
    "lin": "Lin L.I. (1989) *Biometrics* 45:255–268.",
    "gwet": "Gwet K.L. (2008) *Br. J. Math. Stat. Psychol.* 61:29–48.",
    "fleiss": "Fleiss J.L. (1971) *Psychol. Bull.* 76:378–382.",
    "busing": "Busing F.M.T.A., Meijer E. & van der Leeden R. (1999) *Stat. Comput.* 9:3–8.",
    "barlow": "Barlow R.E. et al. (1972) *Statistical Inference under Order Restrictions*.",
    "forman": "Forman S.D. et al. (1995) *Magn. Reson. Med.* 33:636–647.",
    "freedman": "Freedman D. & Lane D. (1983) *J. Bus. Econ. Stat.* 1:292–298.",
    "winkler": "Winkler A.M. et al. (2014) *NeuroImage* 92:381–397.",
    "nieuwenhuis": "Nieuwenhuis S. et al. (2011) *Nat. Neurosci.* 14:1105–1107.",
    "schuirmann": "Schuirmann D.J. (1987) *J. Pharmacokinet. Biopharm.* 15:657–680.",
    "holm": "Holm S. (1979) *Scand. J. Stat.* 6:65–70.",
    "searle": "Searle S.R. et al. (1992) *Variance Components*.",
    "wolter": "Wolter K.M. (2007) *Introduction to Variance Estimation*, ch. 4.",
    "cornfield": "Cornfield J. & Tukey J.W. (1956) *Ann. Math. Stat.* 27:907–949.",
    "efron": "Efron B. & Tibshirani R.J. (1993) *An Introduction to the Bootstrap*, ch. 12.",
}
"""In the order of the list of references; only those that apply are listed."""

_DANGER = re.compile(r"([\\`*_\[\]|~$])")
_TAG = re.compile(r"<(?=[A-Za-z/!?])")
_ENTITY = re.compile(r"&(?=#?\w+;)")


def code(text: Any) -> Markup:
    """A name that a user chose, as a Markdown code span: nothing in it means anything."""
    line = " ".join(str(text).split())
    longest = max((len(run) for run in re.findall("`+", line)), default=0)
    fence = "`" * (longest + 1)
    space = " " if line.startswith("`") or line.endswith("`") else ""
    return Markup(f"{fence}{space}{line}{space}{fence}") if line else Markup("(empty)")


def plain(text: Any) -> Markup:
    """A sentence that may hold names a user chose, with whatever Markdown would act on defused.

    Ordinary text stays as it is: an entity is written only for a sign that would open a tag or
    another entity.
    """
    line = " ".join(str(text).split())
    line = _DANGER.sub(r"\\\1", _ENTITY.sub("&amp;", line))
    return Markup(_TAG.sub("&lt;", line))


def one_line(text: Markup) -> Markup:
    """A paragraph of a template on one line, however the template is broken into lines."""
    return Markup(" ".join(text.split()))


@cache
def templates() -> Environment:
    """The templates of this package, every one with automatic escaping."""
    environment = Environment(
        loader=PackageLoader("seedaudit.report"),
        autoescape=True,
        undefined=StrictUndefined,
        trim_blocks=True,
        lstrip_blocks=True,
        keep_trailing_newline=True,
    )
    environment.filters.update(
        code=code, plain=plain, number=number, percent=percent, point=point, similarity=similarity,
        plural=plural, one_line=one_line,
        distance_words=distance_words, absent_words=absent_words,
    )  # fmt: skip
    return environment


def render_methods(seed: SeedAudit, audit: Audit) -> str:
    """See `seedaudit.report.words.methods_text`."""
    told = audit.provenance
    study = told["study"]
    asked = next(entry for entry in study["seed"] if entry["name"] == seed.name)
    # the provenance leaves out what was not set; the models of the study file have it as None
    placements = Placements.model_validate(study["placements"])
    cleaning = Cleaning.model_validate(study["cleaning"]) if "cleaning" in study else None
    within, sd = cloud_size(placements)
    regions = seed.tables["regions"]
    freedom = told["group"]["residual_df"]
    facts: dict[str, Any] = {
        "name": seed.name,
        "numbers": seed.summary,
        "asked": asked,
        "placements": placements.model_dump(),
        "within": within,
        "sd": sd,
        "cleaning": cleaning.model_dump() if cleaning else None,
        "group": study["group"],
        "threshold": study["threshold"],
        "safe": study["consensus"]["safe"],
        "data": told["data"],
        "cohort": told["group"],
        "freedom": (min(freedom), max(freedom)),
        "atlas": told["regions"],
        "single": seed.summary["n_participants"] == 1,
        "intervals": seed.summary["stability_low"] is not None,
        "regional_intervals": bool(regions["reported_low"].notna().any()),
        "has_ceiling": seed.summary.get("ceiling") is not None,
        "least_ceiling": LEAST_CEILING,
        "nearest_control": _nearest_control(seed),
        "tolerances": _tolerances(seed),
        "claims": study.get("claims"),
        "n_claims": sum((seed.summary.get("claims") or {}).values()),
        "claim_level": LEVEL,
        "one_sample": seed.summary.get("effect_kind") == "mean"
        and len(told["group"]["columns"]) == 1,
        "has_placement_share": "placement_share" in regions
        and bool(regions["placement_share"].notna().any()),
        "caution": CAUTION,
        "steadier": seed.summary.get("steadier"),
        "radii": seed.summary.get("radii"),
        "n_seeds": 0 if audit.between is None else len(audit.seeds),
        "call_share": CALL_SHARE,
        "smallest_stratum": SMALLEST_STRATUM,
        "replicates": signature(bootstrap_interval).parameters["replicates"].default,
        "choices": told["choices"],
        "versions": {"seedaudit": told["seedaudit"], "Python": told["python"], **told["libraries"]},
    }
    facts["numbers"] = {**dict.fromkeys(WORTH), **facts["numbers"]}
    facts["references"] = [REFERENCES[key] for key in REFERENCES if key in set(_cited(facts))]
    return templates().get_template("methods.md.jinja").render(facts)


WORTH = (
    "ceiling", "ceiling_relative", "ceiling_relative_low", "floor", "n_controls", "smoothness_mm",
    "n_class_half_splits", "most_fragile_direction", "motion_rank_correlation", "critical_value",
)  # fmt: skip
"""Numbers that a result need not have."""


def _nearest_control(seed: SeedAudit) -> float | None:
    """Distance of the nearest control seed from the reported centre, rounded down, mm."""
    table = seed.tables.get("controls")
    return None if table is None or not len(table) else floor(table["distance"].min() * 10) / 10


def _tolerances(seed: SeedAudit) -> list[dict[str, Any]]:
    """The measures with a tolerance, in words."""
    return [
        {
            "name": MEASURES[measure],
            "target": limit["target"],
            "words": distance_words(limit["mm"], bool(limit["censored"])),
        }
        for measure, limit in (seed.summary.get("tolerances") or {}).items()
    ]


def _cited(facts: Mapping[str, Any]) -> Iterator[str]:
    """Keys of the references that the text of these facts cites."""
    yield from ("dice", "lin", "gwet", "fleiss", "nichols")
    worth, claims = facts["numbers"], bool(facts["n_claims"]) and not facts["single"]
    rearranged = claims or facts["threshold"]["rule"] == "fwe"
    conditions = {
        "lancaster": facts["asked"]["space"] == "talairach",
        "owen": facts["placements"]["draw"] in ("ball", "normal"),
        "hallquist": facts["cleaning"] is not None,
        "lindquist": facts["cleaning"] is not None,
        "bartlett": facts["single"],
        "dosenbach": facts["atlas"]["source"] == "dosenbach2010",
        "benjamini": facts["threshold"]["rule"] == "fdr",
        "busing": facts["intervals"]
        or bool(facts["steadier"])
        or facts["n_seeds"] > 1
        or worth["ceiling_relative_low"] is not None,
        "barlow": bool(facts["tolerances"]),
        "forman": worth["smoothness_mm"] is not None,
        "freedman": rearranged,
        "holm": claims,
        "nieuwenhuis": claims,
        "schuirmann": claims,
        "searle": facts["has_placement_share"] and not facts["single"],
        "winkler": rearranged,
        "wolter": bool(facts["steadier"]),
        "cornfield": bool(facts["radii"]),
        "efron": facts["regional_intervals"],
    }
    yield from (key for key, cited in conditions.items() if cited)
