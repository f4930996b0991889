"""The methods text: every number from the run, only what was done, and harmless markup."""

from __future__ import annotations

import re
from html.parser import HTMLParser

import pytest
from markdown_it import MarkdownIt

from seedaudit.report import write_report
from seedaudit.report.figures import Drawing
from seedaudit.report.methods import code, plain
from seedaudit.report.words import distance_words, methods_text
from tests.report.invented import MARKUP, invented_audit, invented_seed

PLAIN_TAGS = {"h1", "h2", "p", "strong", "em", "code", "ul", "li"}


def text_of(audit):
    return methods_text(audit.seeds[0], audit)


def section(text, title):
    return text.split(f"## {title}")[1].split("\n## ")[0]


class Rendered(HTMLParser):
    """The tags and the text of an HTML page."""

    def __init__(self, markdown: str) -> None:
        super().__init__()
        self.tags: set[str] = set()
        self.attributes: list[tuple[str, str | None]] = []
        self.text = ""
        # HTML in the text is let through, as careless renderers do
        self.feed(MarkdownIt("commonmark", {"html": True}).render(markdown))

    def handle_starttag(self, tag, attrs):
        self.tags.add(tag)
        self.attributes += attrs

    def handle_data(self, data):
        self.text += data


def test_every_number_comes_from_the_run():
    audit = invented_audit(invented_seed(aside=3))
    body = text_of(audit).split("**Software.**")[0]
    body = re.sub(r"([A-Z]\w+|et al\.) \(?(19|20)\d\d", "", body)  # years of references
    found = {float(n.replace("−", "-")) for n in re.findall(r"−?\d+(?:\.\d+)?", body)}
    seed, told = audit.seeds[0].summary, audit.provenance
    known = {
        *seed["at_mm"], seed["radius_mm"], seed["within_mm"], seed["n_placements_used"],
        seed["n_placements_set_aside"], seed["exclude_margin_mm"], seed["n_analysis_voxels"],
        seed["n_participants"], seed["df"], *told["data"]["grid_shape"], *told["data"]["voxel_mm"],
        *told["data"]["volumes"], told["data"]["runs"], told["data"]["mask_voxels"],
        told["data"]["repetition_time_s"], *told["group"]["residual_df"], told["group"]["folds"],
        told["regions"]["count"], 20, 100, 50, 1, 0.008, 0.09, 0.45, 2, 0.05, 95, 5,
    }  # fmt: skip
    # not of the run: residual df minus 3, class 0, call share, bootstrap
    assert found - known == {0.0, 10.0, 2000.0} - known
    assert known - found <= {3.0}


@pytest.mark.parametrize(
    ("path", "value", "shown"),
    [
        (("placements", "random_state"), 77, "random state 77"),
        (("cleaning", "band"), [0.011, 0.12], "0.011 to 0.12 Hz"),
        (("cleaning", "smooth"), 4.5, "a Gaussian of 4.5 mm full width"),
        (("threshold", "level"), 0.01, "false discovery rate of 0.01"),
        (("consensus", "safe"), 0.9, "at least 90 %, and contested where one lies between 10 %"),
        (("placements", "weighting"), "soft", "weighted by the share of its volume"),
        (("placements", "radii"), [4.0, 6.0], "crossed with the radii 4, 6 mm"),
        (("threshold", "min_extent"), 120.0, "at least 120 mm³ (26 neighbours)"),
        (("group", "missing"), "counts", "analysed in those who have them"),
    ],
)
def test_the_text_follows_the_study(path, value, shown):
    audit = invented_audit()
    assert shown not in text_of(audit)
    audit.provenance["study"][path[0]][path[1]] = value
    assert shown in text_of(audit)


@pytest.mark.parametrize(
    ("placements", "shown"),
    [
        ({"draw": "lattice", "step": 1.5}, "a lattice with a spacing of 1.5 mm within 8 mm"),
        ({"draw": "shell", "distances": [2.0, 5.0]}, "at distances of 2, 5 mm"),
        ({"draw": "normal"}, "standard deviation of 4 mm along each axis, truncated at 8 mm"),
        (
            {"draw": "normal", "uncertainty": {"registration": 3.0, "rounding": 4.0}},
            # root sum of squares of 3 and 4
            "deviation of 5 mm along each axis (the root sum of squares of `registration` 3 mm, "
            "`rounding` 4 mm)",
        ),
    ],
)
def test_each_generator_is_described(placements, shown):
    audit = invented_audit()
    audit.provenance["study"]["placements"] |= placements
    assert shown in text_of(audit)
    sobol = placements["draw"] == "normal"
    assert ("Owen" in section(text_of(audit), "References")) == sobol


@pytest.mark.parametrize(
    ("rule", "words", "warned"),
    [
        ("p", "two-sided p below 0.05, uncorrected", "family-wise error rate was not controlled"),
        ("bonferroni", "by Bonferroni", None),
        ("t", "absolute t of at least 0.05", "family-wise error rate was not controlled"),
        ("effect", "an effect cut and not a test", "Voxels were not tested"),
        ("density", "the top 5 % of the voxels by absolute t", "Voxels were not tested"),
    ],
)
def test_each_rule_is_described(rule, words, warned):
    audit = invented_audit()
    audit.provenance["study"]["threshold"]["rule"] = rule
    text = text_of(audit)
    assert words in text
    undone = section(text, "What was not done")
    assert warned is None or warned in undone
    assert "Benjamini" not in text


def worthy(**options):
    """An audit with ceiling, floor, tolerance and claims."""
    seed = invented_seed(worth=True, **options)
    return invented_audit(seed, claims={"table": "claims.tsv", "smallest_effect": 0.07})


def test_what_similarities_are_worth_is_told_from_the_run():
    audit = worthy()
    text, told = text_of(audit), audit.seeds[0].summary
    limits = told["tolerances"]
    for words in (
        "8 folds of participants were put into two halves in 35 ways",
        "the mean spatial correlation, 0.71, is the ceiling",
        "its mean over the placements is 0.876 (95 % delete-a-fold jackknife interval 0.81 to 0.93",
        "means over 4 splits and 24 placements",
        "5 control seeds, drawn at random 41.2 mm or more from the reported centre",
        "(spatial correlation −0.051)",
        "a smoothness of 6.28 mm",
        f"{distance_words(limits['dice_positive']['mm'], False)} for Dice + of 0.8; ",
        "the most fragile direction was posterior",
        "3 claims were tested",
        "in 5000 rearrangements",
        "within 0.07 in Fisher z",
        "Verdicts: 1 holds, 1 breaks, 1 open.",
        "(rank correlation −0.43)",
    ):
        assert words in text, words
    undone = section(text, "What was not done")
    for words in ("ceiling", "floor", "tolerance", "claims"):
        assert words not in undone
    for name in ("Nieuwenhuis", "Freedman", "Winkler", "Holm", "Schuirmann", "Barlow", "Forman"):
        assert name in section(text, "References")
        assert name not in text_of(invented_audit())


def test_one_participant_has_halves_of_the_series_and_no_test_of_claims():
    text = text_of(worthy(participants=1))
    assert "The time series were cut in halves" in text
    assert "The claims were not tested" in section(text, "What was not done")
    assert "Nieuwenhuis" not in text
    assert "Busing" not in text


def test_a_ceiling_that_cannot_be_used_is_said():
    text = text_of(worthy(ceiling_relative=None, ceiling_relative_low=None))
    assert "No ceiling-relative stability was formed" in section(text, "What was not done")
    assert "its mean over the placements" not in text


def test_the_family_wise_rule_gives_its_critical_value():
    audit = worthy(critical_value=5.4321)
    audit.provenance["study"]["threshold"]["rule"] = "fwe"
    text = text_of(audit)
    assert "a family-wise error rate of 0.05 over the analysis voxels" in text
    assert "(sign flips; Freedman & Lane 1983; Winkler et al. 2014)" in text
    assert "its critical value, 5.432, was used for all placements" in text
    assert "was not controlled" not in section(text, "What was not done")


def test_talairach_seeds_show_both_coordinates():
    audit = invented_audit()
    audit.provenance["study"]["seed"][0] |= {"space": "talairach", "at": [-5, -49, 40]}
    text = text_of(audit)
    assert "Talairach coordinate (−5, −49, 40) mm, converted to MNI (−8, −56, 28) mm" in text
    assert "28:1194–1205" in section(text, "References")
    assert "Lancaster" not in text_of(invented_audit())


def test_only_cited_references_are_listed_and_all_cited_are():
    for audit in (
        invented_audit(),
        invented_audit(invented_seed(participants=1, names=[]), cleaning=None),
        worthy(),
        worthy(participants=1),
    ):
        text = text_of(audit)
        body, listed = text.split("## References")
        names = re.findall(r"^- (\w+)", listed, flags=re.MULTILINE)
        assert len(names) >= 5
        for name in names:
            assert re.search(rf"{name}\b[^;)]*?(19|20)\d\d", body), name
        for name in re.findall(r"([A-Z]\w+)(?: et al\.| & \w+)?,? \(?(?:19|20)\d\d\)", body):
            assert name in listed


def test_what_is_absent_is_said():
    undone = section(text_of(invented_audit()), "What was not done")
    for words in ("ceiling", "tolerance", "claims", "steadier seed", "not independent samples"):
        assert words in undone
    bare = invented_audit(invented_seed(participants=1, names=[]), cleaning=None)
    undone = section(text_of(bare), "What was not done")
    for words in ("one participant", "No nuisance regression", "No regions were given"):
        assert words in undone
    assert "jackknife" not in text_of(bare)
    assert "Bartlett" in text_of(bare)


def test_the_caution_is_printed():
    caution = section(text_of(invented_audit()), "Caution")
    assert "Research use." in caution
    assert "local rules decide" in caution


def test_ordinary_text_has_no_entities():
    audit = invented_audit()
    audit.provenance["choices"].append('Student\'s "own" R&D, a < b & c > d')
    text = text_of(audit)
    assert 'Student\'s "own" R&D, a < b & c > d' in text
    assert not re.search(r"&#?\w+;", text)


def test_no_line_of_the_template_runs_into_the_next():
    for audit in (invented_audit(), invented_audit(cleaning=None), worthy()):
        text = text_of(audit)
        assert not re.search(r"[a-z)][.;][A-Z]", text)
        assert "  " not in text
        assert not re.search(r" [.,;]", text)
        assert not re.search(r"\bNone\b(?! beyond)|nan\b", text)


@pytest.mark.parametrize("name", MARKUP)
def test_markup_of_the_user_is_harmless_in_methods(name):
    audit = invented_audit(invented_seed(names=[name]))
    study = audit.provenance["study"]
    study["group"]["model"] = study["placements"]["inside"] = name
    study["cleaning"]["confounds"] = [name]
    audit.provenance["regions"]["source"] = audit.provenance["group"]["effect"] = name
    audit.provenance["choices"].append(f"decided on {name} and\n\n# no heading")
    page = Rendered(text_of(audit))
    assert page.tags <= PLAIN_TAGS
    assert page.attributes == []
    assert page.text.count(name) == 6
    assert page.text.count("no heading") == 1


def test_markup_of_the_user_is_harmless_in_the_caption(tmp_path):
    seed = invented_seed(names=MARKUP, worth=True, claims=[f"Claim {name}" for name in MARKUP])
    asked = {"table": "claims.tsv", "smallest_effect": 0.05}
    write_report(invented_audit(seed, claims=asked), tmp_path, Drawing(formats=()))
    text = (tmp_path / "figure_caption.md").read_text(encoding="utf-8")
    page = Rendered(text)
    assert page.tags == {"h2", "p"}
    for name in MARKUP:
        assert f"Claim {name}" in page.text
        assert page.text.count(name) >= 2  # among the regions too
    assert "<img" not in text


def test_code_spans_hold_any_run_of_backticks():
    for name in ("`", "a``b", "```", " padded ", "two\nlines"):
        page = Rendered(str(code(name)))
        assert page.tags == {"p", "code"}
        assert page.text.strip() == " ".join(name.split())
    assert plain("a & b") == "a & b"


def test_reports_go_to_the_folder_of_each_seed(tmp_path):
    first = invented_seed()
    second = type(first)("other", dict(first.summary) | {"name": "other"}, first.tables, first.maps)
    write_report(invented_audit(first, second), tmp_path)
    names = {
        "figure.pdf", "figure.svg", "figure.png", "figure_caption.md", "methods.md", "report.html",
    }  # fmt: skip
    for name in ("posterior", "other"):
        assert {path.name for path in (tmp_path / name).iterdir()} == names
    texts = [(tmp_path / name / "methods.md").read_text() for name in ("posterior", "other")]
    assert "`other`" in texts[1]
    assert "`other`" not in texts[0]
