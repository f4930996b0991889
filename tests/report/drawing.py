"""What reaches the paper when a figure is drawn."""

from __future__ import annotations

import pytest
from matplotlib.figure import Figure
from matplotlib.text import Text


def drawn_texts(page: Figure) -> list[Text]:
    """Every text that reaches the paper, found by watching the drawing."""
    seen: list[Text] = []
    draw = Text.draw

    def watched(self, renderer):
        if self.get_visible() and self.get_text().strip():
            seen.append(self)
        return draw(self, renderer)

    with pytest.MonkeyPatch.context() as patch:
        patch.setattr(Text, "draw", watched)
        page.canvas.draw()
    return seen
