"""Claims tables: what is read, and every problem found at once."""

from __future__ import annotations

import numpy as np
import pytest

from seedaudit.errors import DataError, StudyError
from seedaudit.inputs.claims import read_claims

REGIONS = {"front": 3, "back-side": 8}
CONTRAST = np.array([0.0, 1.0])
TERMS = {"arm[a]": np.array([1.0, 0.0]), "arm[b]": np.array([1.0, 1.0])}
HEAD = "claim\tseed\tx\ty\tz\tradius\tregion\tdirection\n"


def read(tmp_path, text, seeds=("one", "two")):
    path = tmp_path / "claims.tsv"
    path.write_text(text, encoding="utf-8")
    return read_claims(path, seeds, REGIONS, CONTRAST, TERMS)


def test_regions_coordinates_and_directions(tmp_path):
    text = HEAD + (
        "first\tone\tn/a\tn/a\tn/a\tn/a\tfront\tpositive\n"
        "second\ttwo\t-4.5\t10\t0\t5\tn/a\tnegative\n"
        "third\tone\tn/a\tn/a\tn/a\tn/a\tback-side\t2*arm[a] - arm[b]\n"
    )
    first, second, third = read(tmp_path, text)
    assert (first.seed, first.region, first.at, first.sign) == ("one", 3, None, 1)
    assert first.target == "front"
    np.testing.assert_array_equal(first.contrast, CONTRAST)
    assert (second.seed, second.region, second.at) == ("two", None, (-4.5, 10.0, 0.0))
    assert (second.radius, second.sign) == (5.0, -1)
    assert second.target == "(-4.5, 10, 0), radius 5 mm"
    np.testing.assert_array_equal(third.contrast, [1.0, -1.0])
    assert (third.sign, third.direction) == (1, "2*arm[a] - arm[b]")


def test_one_seed_need_not_be_named(tmp_path):
    found = read(tmp_path, "claim\tregion\tdirection\nfirst\tfront\tpositive\n", seeds=("only",))
    assert found[0].seed == "only"
    with pytest.raises(StudyError, match="no seed"):
        read(tmp_path, "claim\tregion\tdirection\nfirst\tfront\tpositive\n")


def test_all_problems_are_told_together(tmp_path):
    text = HEAD + (
        "a\tonne\tn/a\tn/a\tn/a\tn/a\tfront\tpositive\n"
        "a\tone\tn/a\tn/a\tn/a\tn/a\tfrint\tpositive\n"
        "b\tone\t1\t2\t3\t5\tfront\tpositive\n"
        "c\tone\tn/a\tn/a\tn/a\tn/a\tn/a\tpositive\n"
        "d\tone\t1\t2\tx\t5\tn/a\tpositive\n"
        "e\tone\t1\t2\t3\t-5\tn/a\tpositive\n"
        "f\tone\t1\t2\t3\tn/a\tn/a\tpositive\n"
        "g\tone\tn/a\tn/a\tn/a\tn/a\tfront\tpositiv\n"
        "h\tone\tn/a\tn/a\tn/a\tn/a\tfront\tn/a\n"
        "n/a\tone\tn/a\tn/a\tn/a\tn/a\tfront\tpositive\n"
    )
    with pytest.raises(StudyError) as caught:
        read(tmp_path, text)
    told = str(caught.value)
    for words in (
        "claim 'a' stands there twice", "seed 'onne' is none of the study", "did you mean one?",
        "no region 'frint'", "did you mean front?", "a region and also x, y, z, radius",
        "no target", "z x", "radius -5", "radius n/a", "direction 'positiv'",
        "positive, negative, or a contrast", "no direction", "no claim",
    ):  # fmt: skip
        assert words in told, words
    assert "row 2" in told


def test_the_table_itself(tmp_path):
    with pytest.raises(DataError, match="no column 'direction'"):
        read(tmp_path, "claim\tregion\nfirst\tfront\n")
    with pytest.raises(DataError, match="holds no claim"):
        read(tmp_path, HEAD)
