"""What the page says and carries, as text; the browser tests use it."""

from __future__ import annotations

import base64
import hashlib
import json
import re
import zlib
from dataclasses import replace
from html.parser import HTMLParser

import numpy as np
import pandas as pd
import pytest

from seedaudit.report import explorer
from seedaudit.report.explorer import explorer_page, write_explorer
from seedaudit.report.explorer_charts import decay_charts, participant_chart, petal_shapes, rose
from seedaudit.report.explorer_data import GREYS, json_ready, page_data
from seedaudit.results import read_only
from seedaudit.space.grid import Grid, VoxelSet
from seedaudit.store import read_table
from tests.browser.pages import CLOSING, EVIL, explorable, invented_claims
from tests.report.invented import head_grid, invented_audit, invented_seed


class Parts(HTMLParser):
    """Scripts, style sheets, links and attributes of a page, as a browser would split it."""

    def __init__(self, text):
        super().__init__()
        self.scripts, self.styles, self.links, self.tags, self.names = {}, [], [], [], []
        self._open = None
        self.feed(text)

    def handle_starttag(self, tag, attrs):
        attributes = dict(attrs)
        self.tags.append(tag)
        self.names += [name for name, _ in attrs]
        self.links += [value for name, value in attrs if name in ("src", "href", "xlink:href")]
        self._open = (tag, attributes.get("id") or attributes.get("type")) if tag in (
            "script", "style") else None  # fmt: skip
        if tag == "meta" and attributes.get("http-equiv") == "Content-Security-Policy":
            self.policy = attributes["content"]

    def handle_endtag(self, tag):
        self._open = None

    def handle_data(self, data):
        if self._open and self._open[0] == "script":
            self.scripts[self._open[1]] = self.scripts.get(self._open[1], "") + data
        elif self._open:
            self.styles.append(data)


def page_of(seed, **options):
    return explorer_page(seed, invented_audit(seed), **options)


@pytest.fixture(scope="module")
def seed():
    return explorable(invented_seed(count=20), claims=invented_claims("posterior"))


@pytest.fixture(scope="module")
def parts(seed):
    return Parts(page_of(seed))


def test_nothing_comes_from_outside(parts):
    outside = [link for link in parts.links if not link.startswith(("#", "data:text/"))]
    assert outside == []
    assert not {"img", "iframe", "link", "object", "embed"} & set(parts.tags)
    code = parts.scripts[None] + "".join(parts.styles)
    assert not re.findall(
        r"https?://(?!www\.w3\.org/2000/svg)|@import|url\(|fetch\(|import\(", code
    )


def test_policy_allows_this_script_and_style_only(parts):
    """W3C Content Security Policy 3: a hash source is base64 of SHA-256 of the element's text."""
    for kind, text in (("script-src", parts.scripts[None]), ("style-src", parts.styles[0])):
        digest = base64.b64encode(hashlib.sha256(text.encode()).digest()).decode()
        assert f"{kind} 'sha256-{digest}';" in parts.policy
    assert parts.policy.startswith("default-src 'none'")
    assert "unsafe" not in parts.policy
    # what such a policy would refuse
    assert "style" not in parts.names
    assert not [name for name in parts.names if name.startswith("on")]


def test_hostile_names_stay_text():
    names = [EVIL, CLOSING, "]]><!--", "'\"`"]
    seed = explorable(
        invented_seed(names=names, count=5, threshold=EVIL), claims=invented_claims("posterior")
    )
    parts = Parts(page_of(seed))
    assert "img" not in parts.tags
    listed = json.loads(parts.scripts["numbers"])["regions"]
    assert listed == names
    assert "<" not in parts.scripts["numbers"]
    plain = Parts(page_of(explorable(invented_seed(names=["a", "b", "c", "d"], count=5))))
    assert parts.tags.count("script") == plain.tags.count("script")


def test_no_participant_is_named_unless_asked_for(seed):
    result = invented_audit(seed)
    inputs = {"sub-zebra1": {"Zoe_bold.nii.gz": "0" * 64}}
    warnings = [
        "participant SUB-ZEBRA3 is set aside", "zoe_bold is odd", "sub-zebra123 is nobody",
        "a mask was not given",
    ]  # fmt: skip
    result = replace(
        result, provenance={**result.provenance, "inputs": inputs, "warnings": warnings}
    )
    text = explorer_page(seed, result)
    decoded = " ".join(
        base64.b64decode(found).decode()
        for found in re.findall(r"data:text/tab-separated-values;base64,([^\"]+)", text)
    )
    assert "a mask was not given" in text
    assert "2 more remarks of the run name participants" in text
    visible = text.replace("sub-zebra123 is nobody", "")
    for word in ("zebra", "zoe"):
        assert word not in visible.lower()
        assert word not in decoded.lower()
    named = explorer_page(seed, result, labels=True)
    assert "sub-zebra3" in named
    assert "Zoe_bold" not in named
    assert "zoe_bold is odd" in named


def test_downloads_are_the_tables(seed, tmp_path):
    parts = Parts(page_of(seed))
    links = [link for link in parts.links if link.startswith("data:text/tab")]
    assert len(links) == len(seed.tables)
    for link, (name, table) in zip(links, sorted(seed.tables.items()), strict=True):
        content = base64.b64decode(link.split(",")[1])
        path = tmp_path / f"{name}.tsv"
        path.write_bytes(content)
        again = read_table(path)
        if name == "participants":
            assert "participant_id" not in again
            assert "reason" not in again
            assert sorted(again["median_spatial_r"].dropna()) == sorted(
                table["median_spatial_r"].dropna()
            )
        else:
            pd.testing.assert_frame_equal(again, table, check_dtype=False)


def test_large_tables_are_left_to_the_folder(seed, monkeypatch):
    monkeypatch.setattr(explorer, "LARGEST_DOWNLOAD", 1000)
    text = page_of(seed)
    assert "too large for this page, see the result folder" in text
    assert 'download="pairs.tsv"' not in text
    assert 'download="claims.tsv"' in text


def test_a_full_page_drops_components_and_says_so(seed, monkeypatch):
    kept = seed.placement_maps
    assert len(kept.steps) > 4
    room = len(page_of(seed).encode()) - 2000
    monkeypatch.setattr(explorer, "LARGEST_PAGE", room)
    text = page_of(seed)
    assert len(text.encode()) <= room
    maps = json.loads(Parts(text).scripts["numbers"])["maps"]
    count = len(maps["steps"])
    assert count < len(kept.steps)
    assert maps["error"] == kept.errors[count - 1] > 0.02
    assert "more than the 0.02 aimed at" in text


def test_the_same_result_gives_the_same_bytes(seed, tmp_path):
    result = invented_audit(seed)
    for name in ("a", "b"):
        (tmp_path / name).mkdir()
        write_explorer(seed, result, tmp_path / name)
    a, b = (tmp_path / name / "report.html" for name in ("a", "b"))
    assert a.read_bytes() == b.read_bytes()


def test_other_seeds_are_linked(seed):
    other = replace(seed, name="anterior & co", summary=read_only({**seed.summary, "name": "x"}))
    text = explorer_page(seed, replace(invented_audit(seed), seeds=(seed, other)))
    assert 'href="../anterior%20%26%20co/report.html"' in text


def unpacked(text, dtype=np.uint8):
    return np.frombuffer(zlib.decompress(base64.b64decode(text)), dtype)


def test_arrays_stand_in_world_order():
    """On an oblique anisotropic grid stored flipped and permuted, against the voxel list."""
    storage = ((2, 0, 1), (-1, 1, -1))
    seed = explorable(invented_seed(grid=head_grid(oblique=True), storage=storage, count=5))
    numbers, arrays = page_data(seed)
    mask = seed.maps["analysis_mask"]
    voxels = VoxelSet.from_mask(Grid(mask.shape, mask.affine), np.asarray(mask.dataobj) > 0)
    inside = unpacked(arrays["analysis"]) > 0
    assert inside.sum() == len(voxels) == numbers["voxels"]
    nx, ny, _ = numbers["shape"]
    flat = np.flatnonzero(inside)
    ijk = np.stack([flat % nx, flat // nx % ny, flat // (nx * ny)], axis=1)
    to_voxel = np.array(numbers["toVoxel"])
    np.testing.assert_allclose(voxels.xyz @ to_voxel[:, :3].T + to_voxel[:, 3], ijk, atol=1e-4)
    at = tuple(voxels.ijk.T)
    labels = np.asarray(seed.maps["region_labels"].dataobj)[at]
    index = seed.tables["regions"]["index"].to_numpy()
    expected = np.where(labels > 0, np.searchsorted(index, labels) + 1, 0)
    np.testing.assert_array_equal(unpacked(arrays["regions"], "<u2"), expected)
    grey = unpacked(arrays["anatomy"])[flat] / GREYS
    np.testing.assert_allclose(
        grey, np.asarray(seed.maps["anatomy"].dataobj)[at], atol=0.5 / GREYS + 1e-6
    )
    share = unpacked(arrays["share_positive"]) / 250
    expected = np.asarray(seed.maps["agreement_positive"].dataobj)[at]
    np.testing.assert_allclose(share, expected, atol=0.002 + 1e-6)


def test_numbers_are_json():
    told = {"a": np.float64("nan"), "b": [np.int64(3), (np.inf, 0.5)], "c": np.array([1.5, np.nan])}
    assert json_ready(told) == {"a": None, "b": [3, [None, 0.5]], "c": [1.5, None]}
    json.dumps(json_ready(told), allow_nan=False)


def decay_rows(measure, ceiling=0.7, floor=0.1):
    return pd.DataFrame(
        {
            "measure": measure,
            "direction": ["all", "all", "left"],
            "distance": [0.0, 8.0, 8.0],
            "fitted": [1.0, 0.6, 0.5],
            "n": 20,
            "ceiling": ceiling,
            "floor": floor,
            "geometry": np.nan,
        }
    )


def test_decay_charts_hold_points_fit_ceiling_and_floor(seed):
    fits = pd.concat([decay_rows("dice_positive"), decay_rows("dice_negative", np.nan, np.nan)])
    charts = decay_charts(replace(seed, tables={**seed.tables, "decay": fits}))
    assert [chart.title for chart in charts] == ["Dice +", "Dice −", "spatial r"]
    first, second, third = charts
    drawn = seed.tables["similarity"].iloc[1:]
    assert [mark["placement"] for mark in first.marks] == drawn["placement"].tolist()
    places = [(mark["x"], mark["y"]) for mark in first.marks]
    expected = [
        (first.across(row.distance), first.down(row.dice_positive)) for row in drawn.itertuples()
    ]
    assert places == expected
    looks = {line["look"]: line["path"] for line in first.lines}
    assert looks["ceiling"].split("L")[1].split()[1] == str(first.down(0.7))
    assert looks["floor"].split("L")[1].split()[1] == str(first.down(0.1))
    assert looks["fit"].endswith(f"L{first.across(8.0)} {first.down(0.6)}")
    assert {line["look"] for line in second.lines} == {"fit"}
    assert [line["words"] for line in third.lines] == ["medians of neighbours"]
    assert first.down(1.0) < first.down(0.0)


def test_rose_directions_lie_where_the_body_has_them():
    names = ["all", "left", "right", "anterior", "posterior", "superior", "inferior"]
    table = pd.DataFrame(
        {
            "measure": "dice_positive",
            "direction": names,
            "tolerance": [5.0, 2.0, 8.0, 4.0, 6.0, np.nan, 3.0],
            "censored": [False, False, True, False, False, False, False],
            "n": 10,
        }
    )
    petals = rose(table)
    words = {petal.direction: petal.words for petal in petals}
    assert words["left"] == "2 mm"
    assert words["right"] == "at least 8 mm"
    assert words["superior"] == "unknown (10 placements)"
    tips = {
        shape["petal"].direction: tuple(map(float, shape["points"].split()[2].split(",")))
        for shape in petal_shapes(petals, 8.0)
    }
    # right of the picture is right, up is anterior or superior (y runs downwards)
    assert tips["left"] == (-2.0, 0.0)
    assert tips["right"] == (8.0, 0.0)
    assert tips["anterior"] == (0.0, -4.0)
    assert tips["posterior"] == (0.0, 6.0)
    assert tips["inferior"] == (0.0, 3.0)
    assert rose(None) == []


def test_participants_stand_in_the_order_of_their_numbers(seed):
    chart = participant_chart(seed.tables["participants"])
    medians = [mark["y"] for mark in chart.marks if mark["shape"] == "round"]
    assert medians == sorted(medians, reverse=True)
    assert len(medians) == 12


def test_absent_sections_say_why(seed):
    bare = replace(
        seed, placement_maps=None, tables={k: seed.tables[k] for k in ("placements", "similarity")}
        | {"regions": seed.tables["regions"].iloc[:0]},
    )  # fmt: skip
    result = invented_audit(seed)
    text = explorer_page(bare, result)
    for words in (
        "the seed cannot be moved here", "No ceiling and floor", "No tolerance",
        "The study named no regions", "The study makes no claims", "no table of pairs",
        "no sweep of thresholds", "no similarities of single participants",
        "did not ask for a steadier seed",
    ):  # fmt: skip
        assert words in text, words
    study = {**result.provenance["study"], "claims": {}, "steadier": {}}
    text = explorer_page(bare, replace(result, provenance={**result.provenance, "study": study}))
    assert "The study names claims, but" in text
    assert "A steadier seed was asked for, but" in text


STEADIER = {
    "recommended": "move", "recommended_mm": [4.0, -52.0, 26.0], "moved_mm": 4.0, "gain": 0.031,
    "gain_low": 0.01, "gain_high": 0.05, "gain_in_sample": 0.04, "n_splits": 35, "n_folds": 8,
    "search_mm": 8.0, "within_mm": 6.0, "step_mm": 2.0, "keep_similarity": 0.8, "n_candidates": 3,
    "n_targets": 4000, "n_voxels_outside": 9000, "target_error_score": 0.001,
    "target_error_gain": 0.002, "scored_on": "mean map",
}  # fmt: skip


def steadier_table(recommended):
    """The reported seed, a place on the front, and one that is neither."""
    return pd.DataFrame(
        {
            "x": [-8.0, -6.0, -10.0], "y": [-56.0, -54.0, -56.0], "z": [28.0, 30.0, 28.0],
            "moved_mm": [0.0, 3.46, 2.0],
            "gain": [0.0, 0.0312, -0.1], "gain_low": [np.nan, -0.01, -0.2],
            "gain_high": [np.nan, 0.07, 0.0], "similarity_to_reported": [1.0, 0.91, 0.4],
            "share_chosen": [0.5, 0.4, 0.1], "on_front": [True, True, False],
            "recommended": np.arange(3) == recommended,
        }
    )  # fmt: skip


def words_of(text):
    return re.sub(r"\s+", " ", re.sub(r"<[^>]+>", " ", text))


def test_sections_show_what_is_there(seed):
    summary = {**seed.summary, "steadier": STEADIER}
    tables = {**seed.tables, "steadier": steadier_table(1)}
    text = words_of(page_of(replace(seed, tables=tables, summary=summary)))
    for words in (
        "Recommended: (−6, −54, 30) mm, 3.5 mm from the reported seed. Gain of the search in "
        "other participants: 0.031 (95 % interval 0.01 to 0.05).",
        "✓ holds", "✗ breaks", "? open",
    ):  # fmt: skip
        assert words in text, words
    assert "(−10, −56, 28)" not in text
    assert text.index(str(seed.summary["sentence"])) < text.index("Move the seed")
    kept = words_of(page_of(replace(seed, tables={**seed.tables, "steadier": steadier_table(0)})))
    assert "Keep the reported seed: no gain beyond noise was found." in kept


def test_seeds_are_compared_where_there_are_several(seed):
    other = replace(seed, name="other", summary=read_only({**seed.summary, "name": "other"}))
    result = replace(invented_audit(seed), seeds=(seed, other))
    table = pd.DataFrame(
        {
            "seed_a": ["posterior"] * 3, "seed_b": ["other", "third", "fourth"],
            "distance_mm": [5.25, 9.0, 12.0], "dice_positive": 0.61, "dice_negative": np.nan,
            "spatial_r": 0.8, "relative": [0.951, 0.5, np.nan], "relative_low": [0.9, 0.4, np.nan],
            "relative_high": [1.0, 0.6, np.nan], "interchangeable": [True, False, None],
        }
    )  # fmt: skip
    text = words_of(explorer_page(seed, result, between=table))
    assert "posterior, other 5.2 mm 0.61 n/a 0.80 0.95 0.90 to 1.00 yes" in text
    assert "0.50 0.40 to 0.60 no" in text
    assert "cannot be told" in text
    assert "holds no comparison of the seeds" in explorer_page(seed, result)
    assert "Other seeds" not in page_of(seed)
