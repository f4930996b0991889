"""The figures, texts and tables of a finished result, drawn again without the data."""

from __future__ import annotations

import os
import shutil
import tempfile
from collections.abc import Sequence
from pathlib import Path

from seedaudit.errors import DataError, Problem, StudyError
from seedaudit.guards import own_path
from seedaudit.report import write_report
from seedaudit.report.captions import MAIN
from seedaudit.report.figures import FIGURES, FORMATS, PANELS, WIDTH, Drawing, present
from seedaudit.results import Audit
from seedaudit.store import write_tables


def drawing_of(
    audit: Audit,
    formats: Sequence[str] = (),
    width: float | None = None,
    panels: str | None = None,
    *,
    dark: bool = False,
) -> Drawing:
    """How figures are drawn, from what is asked in words.

    Parameters
    ----------
    audit : Audit
    formats : sequence of {"pdf", "svg", "png"}
        None: all.
    width : float, optional
        mm
    panels : str, optional
        Letters of the supplementary figure, or names, with commas between; default: all.
    dark : bool

    Raises
    ------
    StudyError
        If there is no such panel, or the result holds nothing for it.
    """
    letters = dict(zip("abcdef", MAIN, strict=True))
    chosen = None
    if panels is not None:
        asked = [text.strip() for text in panels.split(",") if text.strip()]
        chosen = [letters.get(text.lower(), text.lower()) for text in asked]
        allowed = f"letters a to f, or {', '.join(PANELS)}"
        if wrong := [text for text, name in zip(asked, chosen, strict=True) if name not in PANELS]:
            raise StudyError(Problem("--panels", f"names {', '.join(wrong)}", allowed))
        if not chosen:
            raise StudyError(Problem("--panels", "names no panel", allowed))
        if absent := [name for name in chosen if not _drawable(audit, name)]:
            raise StudyError(
                Problem(
                    "--panels",
                    f"the result holds nothing for {', '.join(absent)}",
                    "panels of what the study asked for",
                )
            )
    return Drawing(tuple(dict.fromkeys(formats)) or FORMATS, width or WIDTH, chosen, dark)


def _drawable(audit: Audit, panel: str) -> bool:
    if panel == "seeds":
        return audit.between is not None
    name = next(name for name, rows in FIGURES.items() if any(panel in row for row in rows))
    return any(present(name, seed) for seed in audit.seeds)


def redraw(
    audit: Audit, folder: Path, drawing: Drawing | None = None, *, replace: bool = False
) -> list[Path]:
    """Write figures, captions, methods text, tables and explorer again.

    All are drawn before the first takes its place, and each does so as a whole.

    Parameters
    ----------
    audit : Audit
    folder : path
        The result folder itself, or another one.
    drawing : Drawing, optional
    replace : bool
        Files of the same names may be replaced.

    Returns
    -------
    list of Path
        The files, within the folder.

    Raises
    ------
    StudyError
        If there are files of the same names that may not be replaced.
    DataError
        If the disk refuses, or something in the folder leads elsewhere.
    """
    try:
        folder.mkdir(parents=True, exist_ok=True)
        partial = Path(tempfile.mkdtemp(prefix=".draw-", dir=folder))
        try:
            write_tables(audit, partial)
            write_report(audit, partial, drawing)
            files = sorted(path.relative_to(partial) for path in partial.rglob("*.*"))
            places = [own_path(folder, *path.parts) for path in files]
            _check_free(places, replace=replace)
            for path, place in zip(files, places, strict=True):
                place.parent.mkdir(parents=True, exist_ok=True)
                os.replace(partial / path, place)
        finally:
            shutil.rmtree(partial, ignore_errors=True)
    except OSError as error:
        raise DataError(
            Problem(
                f"output {folder.name}",
                f"cannot be written ({error.strerror or error})",
                "a writable folder with enough space",
                "choose another folder with --out",
            )
        ) from error
    return files


def _check_free(places: Sequence[Path], *, replace: bool) -> None:
    taken = [place.name for place in places if place.exists()]
    if taken and not replace:
        raise StudyError(
            Problem(
                "--out",
                f"holds {taken[0]} and {len(taken) - 1} more files of these names",
                "drawings are never overwritten silently",
                "choose another folder, or say --replace",
            )
        )
