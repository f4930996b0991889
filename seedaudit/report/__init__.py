"""From a result to what a person reads and prints."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from seedaudit.report.figures import Drawing
    from seedaudit.results import Audit


CAUTION = (
    "Research use. A seed that feeds stimulation or surgical targeting, or any decision on a "
    "person's care, needs validated clinical software and licensed practice; local rules decide."
)


def write_report(audit: Audit, folder: Path, drawing: Drawing | None = None) -> None:
    """Write the explorer, the figures, their captions and the methods text of every seed.

    With several seeds, a figure that compares them stands at the top.

    Parameters
    ----------
    audit : Audit
    folder : path
        The result folder; with several seeds, each has a folder of its own in it.
    drawing : Drawing, optional
        How figures are drawn.
    """
    # imported here: matplotlib is slow to load, and most commands draw nothing
    from seedaudit.report.explorer import write_explorer
    from seedaudit.report.figures import Drawing, save_figures
    from seedaudit.report.seeds_figure import save_seeds_figure
    from seedaudit.report.words import methods_text
    from seedaudit.store import seed_folder

    drawing = drawing or Drawing()
    for seed in audit.seeds:
        own = seed_folder(audit, folder, seed.name)
        own.mkdir(parents=True, exist_ok=True)
        write_explorer(seed, audit, own, between=audit.between)
        save_figures(seed, own, drawing)
        text = methods_text(seed, audit)
        (own / "methods.md").write_text(text, encoding="utf-8", newline="\n")
    if audit.between is not None and drawing.wants("seeds"):
        save_seeds_figure(audit.between, folder, drawing)
