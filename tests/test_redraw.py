"""A finished result drawn again: the bytes that the run wrote, and only what is asked."""

from __future__ import annotations

import shutil
from pathlib import Path

import pytest
from PIL import Image

from seedaudit import Study, audit
from seedaudit.cli import main
from seedaudit.errors import StudyError
from seedaudit.redraw import drawing_of, redraw
from seedaudit.report.figures import Drawing
from seedaudit.store import load_audit
from tests.breaks import swap
from tests.small_study import write_small_study

TWO_SEEDS = """
[[seed]]
name = "other"
at = [-1.0, -40.0, 24.0]
space = "native"
radius = 5.0
"""


def result_of(folder: Path) -> Path:
    swap(("count = 12", "count = 4"))(folder)
    return audit(Study.load(folder / "study.toml"), workers=2).save(folder / "audit")


@pytest.fixture(scope="module")
def finished(tmp_path_factory) -> Path:
    """The result folder of a run, with figures."""
    folder = tmp_path_factory.mktemp("finished")
    write_small_study(folder, participants=4, two_runs=())
    return result_of(folder)


@pytest.fixture
def copy(finished, tmp_path) -> Path:
    return Path(shutil.copytree(finished, tmp_path / "audit"))


def content(folder: Path) -> dict[str, bytes]:
    files = sorted(path for path in folder.rglob("*") if path.is_file())
    return {str(path.relative_to(folder)): path.read_bytes() for path in files}


def drawn_names(folder: Path) -> set[str]:
    return {path.name for path in folder.glob("*.*") if path.suffix in (".pdf", ".svg", ".png")}


def test_without_options_the_bytes_are_those_of_the_run(finished, copy, capsys):
    inode = (copy / "methods.md").stat().st_ino
    assert main(["draw", str(copy)]) == 0
    assert content(copy) == content(finished)
    assert (copy / "methods.md").stat().st_ino != inode  # written anew, not left alone
    assert "Drawn: " in capsys.readouterr().out


def test_several_seeds_are_drawn_in_their_folders(tmp_path):
    write_small_study(tmp_path, participants=4, two_runs=())
    study = tmp_path / "study.toml"
    text = study.read_text(encoding="utf-8")
    study.write_text(text.replace("[placements]", f"{TWO_SEEDS}\n[placements]"), encoding="utf-8")
    folder = result_of(tmp_path)
    before = content(folder)
    assert {"seeds.pdf", "seeds_caption.md", "other/figure.pdf", "tables/seeds.tsv"} <= set(before)
    redraw(load_audit(folder), folder, replace=True)
    assert content(folder) == before


def test_another_folder_gets_what_is_asked(finished, copy, tmp_path):
    before = content(copy)
    asked = ["--format", "png", "--width", "90", "--dark", "--panels", "f, rose"]
    assert main(["draw", str(copy), "--out", str(tmp_path / "slides"), *asked]) == 0
    assert content(copy) == before
    slides = tmp_path / "slides"
    assert drawn_names(slides) == {"figure.png"}
    with Image.open(slides / "figure.png") as picture:
        assert picture.width == pytest.approx(90 / 25.4 * 300, abs=1)
        assert max(picture.getpixel((2, 2))[:3]) < 40  # dark paper
    caption = (slides / "figure_caption.md").read_text(encoding="utf-8")
    assert "Two panels: tolerance by direction, claims" in caption
    for name in ("report.html", "methods.md", "tables/regions.tsv", "tables/regions.json"):
        assert (slides / name).read_bytes() == before[name]
    assert not (slides / "maps").exists()


def test_drawings_are_never_overwritten_silently(copy, tmp_path, capsys):
    out = ["--out", str(tmp_path / "slides"), "--format", "png", "--panels", "rose"]
    assert main(["draw", str(copy), *out]) == 0
    before = content(tmp_path / "slides")
    assert main(["draw", str(copy), *out, "--dark"]) == 2
    assert "never overwritten silently" in capsys.readouterr().err
    assert content(tmp_path / "slides") == before
    assert main(["draw", str(copy), *out, "--dark", "--replace"]) == 0
    assert content(tmp_path / "slides") != before


def test_nothing_is_replaced_when_drawing_fails(copy, monkeypatch):
    before = content(copy)

    def fails(*_: object) -> str:
        raise ZeroDivisionError

    monkeypatch.setattr("seedaudit.report.words.methods_text", fails)
    with pytest.raises(ZeroDivisionError):
        redraw(load_audit(copy), copy, Drawing(dark=True), replace=True)
    assert content(copy) == before


def test_a_link_in_the_result_is_not_followed(copy, tmp_path):
    target = tmp_path / "mine.md"
    target.write_text("mine", encoding="utf-8")
    (copy / "methods.md").unlink()
    (copy / "methods.md").symlink_to(target)
    assert main(["draw", str(copy), "--format", "png", "--panels", "rose"]) == 3
    assert target.read_text(encoding="utf-8") == "mine"


@pytest.mark.parametrize(
    ("panels", "words"),
    [
        ("a,nose", "names nose"),
        (",", "names no panel"),
        ("landscape", "holds nothing for landscape"),
        ("seeds,radii", "holds nothing for seeds, radii"),
    ],
)
def test_panels_that_are_not_there(panels, words, finished):
    with pytest.raises(StudyError, match=words):
        drawing_of(load_audit(finished), panels=panels)


def test_letters_and_names_mean_the_same(finished):
    result = load_audit(finished)
    named = "cloud,agreement,decay,regions,rose,claims"
    assert drawing_of(result, panels="a,B,c,d,e,f") == drawing_of(result, panels=named)
    assert drawing_of(result) == Drawing()


def test_a_folder_that_is_no_result(tmp_path, capsys):
    assert main(["draw", str(tmp_path)]) == 3
    assert "a complete result folder" in capsys.readouterr().err
    assert list(tmp_path.iterdir()) == []
