"""The width of the line spread, found by which blur makes star and nodes agree."""

from __future__ import annotations

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.alignment import LADDER, Nodes, parabola, telluric_free
from starfathom.classify.grid import WAVE, blur, rectify

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

#: Effective number of independent pieces in a spectrum; far fewer in hot stars, which have few lines.
_PIECES, _PIECES_HOT, _HOT_STEP = 120.0, 20.0, 27.0


def line_spread(flux: FloatArray, flat: FloatArray, valid: BoolArray, best: NDArray[np.int64], nodes: Nodes,
                pixel_angstrom: FloatArray) -> FloatArray:
    """FWHM (angstrom) of the line spread of (n, m) spectra at rest, from the blur that makes star and nodes agree.

    ``pixel_angstrom`` (n,) is the spectrum's own sampling: spectrographs put 2 to 4 pixels on a resolution element,
    and that is the prior, with a factor of 1.6 as its width. Among hot stars rotation widens the few lines there are,
    so there the prior weighs more.
    """
    use = np.flatnonzero(nodes.valid & telluric_free(WAVE) & (WAVE > 3750) & (WAVE < 6800))[::2]
    expected = np.log(np.clip(2.7 * pixel_angstrom, 1.0, 25.0))
    hot = nodes.step[best[:, 0]] < _HOT_STEP
    pieces = np.where(hot, _PIECES_HOT, _PIECES)

    def settle(curves: list[FloatArray], trial: FloatArray, rows: NDArray[np.int64]) -> tuple[FloatArray, FloatArray]:
        chi = np.maximum(np.array(curves).T, 1e-12)
        score = pieces[rows, None] * np.log(chi) + ((np.log(trial)[None] - expected[rows, None]) / np.log(1.6)) ** 2
        at = parabola(score, np.arange(len(trial), dtype=float))[0]
        return np.exp(np.interp(at, np.arange(len(trial)), np.log(trial))), score.argmin(axis=1)

    # Balmer wings tell of gravity, not of the instrument
    weight = valid[:, use] & ~(hot[:, None] & _near_balmer(WAVE[use])[None, :])
    y = np.where(weight, flat[:, use] - 1.0, 0.0)
    curves = [(np.where(weight, y - nodes.rect[f][best[:, :3]][:, :, use].mean(axis=1), 0.0) ** 2).sum(axis=1)
              for f in range(len(LADDER))]
    out, lowest = settle(curves, np.array(LADDER), np.arange(len(flat)))
    fine = np.flatnonzero(lowest == 0)
    if fine.size:   # the star is as fine as the nodes or finer: blur the star instead
        trial = np.array([0.8, 1.1, 1.6, 2.2, 2.7, 3.2])
        curves = []
        mean = nodes.rect[2][best[fine, :3]][:, :, use].mean(axis=1)
        for f in trial:
            blurred, ok = blur(flux[fine], valid[fine], float(np.sqrt(LADDER[2] ** 2 - f ** 2)))
            level, _ = rectify(blurred, ok)
            curves.append((np.where(ok[:, use] & weight[fine], level[:, use] - 1.0 - mean, 0.0) ** 2).sum(axis=1))
        out[fine] = np.clip(settle(curves, trial, fine)[0], 0.8, 3.2)
    return out


def _near_balmer(wave_angstrom: FloatArray) -> BoolArray:
    """True within 45 A of a Balmer line, and blueward of H8 where they run together."""
    lines = np.array([3889.1, 3970.1, 4101.7, 4340.5, 4861.3, 6562.8])
    return (np.abs(wave_angstrom[:, None] - lines) < 45.0).any(axis=1) | (wave_angstrom < 3935.0)
