"""From a result to what a person reads and prints."""

from __future__ import annotations

from pathlib import Path
from typing import TYPE_CHECKING

if TYPE_CHECKING:
    from seedaudit.results import Audit


CAUTION = (
    "Research use. A seed that feeds stimulation or surgical targeting, or any decision on a "
    "person's care, needs validated clinical software and licensed practice; local rules decide."
)


def write_report(audit: Audit, folder: Path) -> None:
    """Write the explorer, the figure, its caption and the methods text of every seed.

    With several seeds, a figure that compares them stands at the top.

    Parameters
    ----------
    audit : Audit
    folder : path
        The result folder; with several seeds, each has a folder of its own in it.
    """
    # imported here: matplotlib is slow to load, and most commands draw nothing
    from seedaudit.report.explorer import write_explorer
    from seedaudit.report.figures import save_figure
    from seedaudit.report.methods import plain
    from seedaudit.report.seeds_figure import save_seeds_figure
    from seedaudit.report.words import alternative_text, caption, methods_text
    from seedaudit.store import seed_folder

    for seed in audit.seeds:
        own = seed_folder(audit, folder, seed.name)
        own.mkdir(parents=True, exist_ok=True)
        write_explorer(seed, audit, own, between=audit.between)
        save_figure(seed, own)
        texts = {
            "figure_caption.md": (
                f"## Caption\n\n{plain(caption(seed))}\n\n"
                f"## Alternative text\n\n{plain(alternative_text(seed))}\n"
            ),
            "methods.md": methods_text(seed, audit),
        }
        for name, text in texts.items():
            (own / name).write_text(text, encoding="utf-8", newline="\n")
    if audit.between is not None:
        save_seeds_figure(audit.between, folder)
