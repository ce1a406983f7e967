"""A folder of products is that of one estimate or that of nights, and never both."""

from __future__ import annotations

from pathlib import Path

from ensemble_horizon.errors import ProductError
from ensemble_horizon.night.chain.state import STATE_FILE
from ensemble_horizon.products.folder import holds_estimate

_REMEDY = "give each a settings file with a folder of its own under products.folder"


def refuse_nights(folder: Path) -> None:
    """Refuse a folder of nights, which the products of `estimate` would be mixed with.

    Raises
    ------
    ProductError
    """
    nights = [path.parent.name for path in folder.glob(f"[0-9]*T[0-9]*/{STATE_FILE}")]
    if nights:
        raise ProductError(
            str(folder),
            expected="a folder of its own for the products of `estimate` (products.folder)",
            found=f"the nights that `nightly` made there, such as {max(nights)}",
            remedy=f"look into {folder / max(nights)} for that night, or {_REMEDY}",
        )


def refuse_estimate(folder: Path) -> None:
    """Refuse a folder with products of `estimate`, which the nights would be mixed with.

    Raises
    ------
    ProductError
    """
    if holds_estimate(folder):
        raise ProductError(
            str(folder),
            expected="a folder of its own for the nights (products.folder)",
            found="products of `estimate`",
            remedy=f"move them away, or {_REMEDY}",
        )
