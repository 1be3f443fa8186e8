"""The plane of types: subtypes across, luminosity classes up. Cells are (subtype, class) indices."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from starfathom.templates.subtypes import CLASSES, LUM_CODES, SUBTYPES, T_CODES

FloatArray = NDArray[np.float64]
Cell = tuple[int, int]

N_TYPES, N_CLASSES = len(SUBTYPES), len(CLASSES)


def cell_name(cell: Cell) -> str:
    """Such as "G2 V"."""
    return f"{SUBTYPES[cell[0]]} {CLASSES[cell[1]]}"


def cell_codes(cell: Cell) -> tuple[float, float]:
    """(t_code, lum_code) of a cell."""
    return float(T_CODES[cell[0]]), float(LUM_CODES[cell[1]])


def cell_near(t_code: float, lum_code: float) -> Cell:
    """The cell nearest to a continuous type; class V where ``lum_code`` is not known, G0 where ``t_code`` is not."""
    t = 40.0 if not np.isfinite(t_code) else t_code
    lum = 5.0 if not np.isfinite(lum_code) else lum_code
    return int(np.argmin(np.abs(T_CODES - t))), int(np.argmin(np.abs(np.asarray(LUM_CODES) - lum)))


def cell_named(text: str) -> Cell | None:
    """The cell of a plain type such as "G2 V"; None when the text is not the name of one."""
    parts = text.split()
    if len(parts) != 2 or parts[0] not in SUBTYPES or parts[1] not in CLASSES:
        return None
    return SUBTYPES.index(parts[0]), CLASSES.index(parts[1])


def clamp(cell: Cell) -> Cell:
    """The cell, or the one at the edge of the plane nearest to it."""
    return min(max(cell[0], 0), N_TYPES - 1), min(max(cell[1], 0), N_CLASSES - 1)


def peaks(posterior: FloatArray, least: float = 0.01) -> list[Cell]:
    """Cells no neighbour (of eight) exceeds, highest first, those above ``least`` of the highest."""
    padded = np.pad(posterior, 1, constant_values=-1.0)
    higher = np.zeros(posterior.shape, bool)
    for di in (-1, 0, 1):
        for dj in (-1, 0, 1):
            if di or dj:
                shifted = padded[1 + di:1 + di + posterior.shape[0], 1 + dj:1 + dj + posterior.shape[1]]
                # on a tie the later cell gives way, so that a level ridge has one peak
                higher |= (shifted > posterior) | ((shifted == posterior) & ((di, dj) < (0, 0)))
    top = ~higher & (posterior >= least * posterior.max()) & (posterior > 0)
    cells = [(int(i), int(j)) for i, j in zip(*np.nonzero(top))]
    return sorted(cells, key=lambda c: -posterior[c])


def rival(posterior: FloatArray, own: int) -> Cell | None:
    """The likeliest cell of the likeliest class other than class ``own``; None when no other class has any share."""
    share = posterior.sum(axis=0)
    share[own] = -1.0
    j = int(share.argmax())
    if share[j] <= 0:
        return None
    return int(posterior[:, j].argmax()), j


def inner_set(posterior: FloatArray, share: float = 0.9) -> NDArray[np.bool_]:
    """Mask of the fewest cells that together hold ``share`` of the probability."""
    order = np.argsort(posterior, axis=None)[::-1]
    total = np.cumsum(posterior.ravel()[order])
    count = int(np.searchsorted(total, share * total[-1])) + 1
    mask = np.zeros(posterior.size, bool)
    mask[order[:count]] = True
    return mask.reshape(posterior.shape)
