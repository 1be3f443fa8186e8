"""Two stars in one spectrum: does a pair of library stars fit clearly better than any single one?

In the coarse view a blend is f s1 + (1 - f) s2 with a share f that drifts linearly with wavelength, since the two
differ in colour. Every pair of some sixty stars spread over type and class is tried at once: the least-squares share
and its chi-squared follow from the products of the stars with one another.
"""

from __future__ import annotations

import re
from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.foreign_library import COARSE_WAVE, COMMON, VIEW_FLOOR, Examples, View

FloatArray = NDArray[np.float64]
#: Types must differ by this many tenths, and each star give this share of the light at 5200 A.
_APART, _LEAST_SHARE, _DRIFT = 15.0, 0.15, 0.45
_EVERY = 2
_PIXELS = COMMON[::_EVERY]
_X = ((COARSE_WAVE[_PIXELS] - 5200.0) / 1500.0).astype(np.float32)
_LABEL = re.compile(r"([OBAFGKM])([\d.]+)(I{1,3}(?![VX])[ab]*|I[ab]+|V)(?![-+/IV])")


@dataclass(frozen=True)
class Pair:
    """Best pair: ``chi2`` over all pixels of the common range, the two labels and the share of the first at 5200 A."""

    chi2: float
    first: str
    second: str
    share: float


class PairFinder:
    """Representatives of the normal stars among ``stars``, one every 2.5 subtypes for dwarfs, giants, supergiants."""

    def __init__(self, stars: Examples) -> None:
        labels = [str(t).replace(" ", "") for t in stars.label]
        found = [_LABEL.fullmatch(t) for t in labels]
        code = np.array([10.0 * "OBAFGKM".index(m[1]) + float(m[2]) if m else np.nan for m in found])
        group = np.array([("I" if m[3][:2] in ("Ia", "Ib") else m[3]) if m else "" for m in found])
        whole = stars.valid[:, COMMON].mean(axis=1) > 0.97
        chosen = []
        for name in ("I", "III", "V"):
            for at in np.arange(5.0, 66.0, 2.5):
                near = np.flatnonzero(whole & (group == name) & (np.abs(code - at) < 1.3))
                if near.size:
                    depth = stars.depth[near][:, COMMON]
                    middle = np.median(depth, axis=0)
                    chosen.append(int(near[np.argmin(((depth - middle) ** 2).sum(axis=1))]))
        rows = np.array(sorted(set(chosen)))
        self._labels = [labels[k] for k in rows]
        self._code = code[rows]
        self._depth = stars.depth[rows][:, _PIXELS]
        self._apart = np.abs(self._code[:, None] - self._code) >= _APART

    def best(self, view: View, row: int) -> Pair:
        """The best pair for one spectrum (about 1 ms)."""
        s, y = self._depth, view.depth[row][_PIXELS]
        w = (view.valid[row][_PIXELS] / (view.sigma[row][_PIXELS] ** 2 + VIEW_FLOOR ** 2)).astype(np.float32)
        gram = [(s * (w * _X ** k)) @ s.T for k in range(3)]
        cross = [s @ (w * _X ** k * y) for k in range(2)]
        own = [np.diag(g) for g in gram]
        # difference d = s_i - s_j against what s_j leaves, r = y - s_j: normal equations of share and drift
        dd = [own[k][:, None] + own[k] - 2 * gram[k] for k in range(3)]
        dr = [cross[k][:, None] - cross[k] - gram[k] + own[k] for k in range(2)]
        rr = float((w * y * y).sum()) - 2 * cross[0] + own[0]
        stiff = dd[2] + 0.02 * dd[0] + 1e-6
        det = np.maximum(dd[0] * stiff - dd[1] ** 2, 1e-9)
        share, drift = (stiff * dr[0] - dd[1] * dr[1]) / det, (dd[0] * dr[1] - dd[1] * dr[0]) / det
        chi2 = rr - 2 * (share * dr[0] + drift * dr[1]) + share ** 2 * dd[0] + 2 * share * drift * dd[1] \
            + drift ** 2 * dd[2]
        fair = self._apart & (share > _LEAST_SHARE) & (share < 1 - _LEAST_SHARE) & (np.abs(drift) < _DRIFT)
        chi2 = np.where(fair, chi2, np.inf)
        i, j = np.unravel_index(int(np.argmin(chi2)), chi2.shape)
        return Pair(_EVERY * float(chi2[i, j]), self._labels[i], self._labels[j], float(share[i, j]))
