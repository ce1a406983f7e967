"""The file of the briefing page."""

from __future__ import annotations

import os
from pathlib import Path

from ensemble_horizon.products.page.briefing import Briefing
from ensemble_horizon.products.writing import written_whole


def write_page(path: str | os.PathLike[str], briefing: Briefing) -> Path:
    """Write a briefing as one HTML file that needs nothing beside it, whole or not at all.

    Equal briefings give equal bytes.

    Parameters
    ----------
    path : path
        The file to write.
    briefing : Briefing

    Raises
    ------
    ArgumentError
        If the grid of a map cannot be drawn.
    ProductError
        If the file cannot be written.
    """
    # The libraries for figures and templates are slow to load: only when a page is written.
    from ensemble_horizon.products.page.rendering import page_text  # noqa: PLC0415

    text = page_text(briefing)
    target = Path(path)
    with written_whole(target) as neighbour:
        # A name that is no text at all must not cost the page.
        neighbour.write_bytes(text.encode("utf-8", errors="replace"))
    return target
