"""Levenberg-Marquardt fits of many line profiles at once.

A job is one window of one spectrum: the normalised flux F/Fc over P pixels and K components. All jobs of a batch
share K, the profile and the way parameters are tied, and go through every step together; finished jobs drop out.

A Voigt line's wings reach the side bands and lower the pseudo-continuum by which the flux was divided. The model is
therefore (1 - d) / (1 - d_bands), with d the summed profiles and d_bands the same straight line through the
profiles' means in the side bands that made the pseudo-continuum, so that the area of a broad line is not lost.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.lines.profiles import gaussian, voigt

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

_MAX_STEPS = 50
# stop when a step gains less than this times chi2 per degree of freedom: no parameter then moves by more than
# a hundredth of the error that the residuals allow it
_GAIN = 1e-4
_PATIENCE = 5


@dataclass(frozen=True)
class Jobs:
    """Windows to fit, wavelengths relative to the feature's rest wavelength, angstrom.

    Attributes
    ----------
    x : (j, p) pixel wavelengths; ``y`` (j, p) normalised flux; ``weight`` (j, p) 1/sigma^2 of ``y``, 0 for padding
    share_red : (j, p) weight of the red side band in the continuum at each pixel
    nodes : (j, 2, 3) points over the blue and the red side band, ``NODE_WEIGHTS`` their weights in the mean
    band_var : (j, 2) variance of the side-band means relative to the continuum
    offsets : (j, k) rest wavelengths of the components
    """

    x: FloatArray
    y: FloatArray
    weight: FloatArray
    share_red: FloatArray
    nodes: FloatArray
    band_var: FloatArray
    offsets: FloatArray

    def take(self, rows: NDArray[np.intp]) -> Jobs:
        return Jobs(*(getattr(self, name)[rows] for name in self.__dataclass_fields__))


#: Three-point Gauss-Legendre nodes on (-1, 1) and weights of a mean.
NODES = np.array([-np.sqrt(0.6), 0.0, np.sqrt(0.6)])
NODE_WEIGHTS = np.array([5.0, 8.0, 5.0]) / 18.0


@dataclass(frozen=True)
class Ties:
    """How few fitted numbers make all parameters: full = base + fitted @ matrix.

    Full parameters run component by component: area, centre, sigma and, for a Voigt profile, gamma.
    """

    matrix: FloatArray
    components: int
    is_voigt: bool

    @property
    def per_component(self) -> int:
        return 4 if self.is_voigt else 3

    @property
    def areas(self) -> BoolArray:
        """Which fitted numbers are areas, (q,)."""
        return np.asarray(self.matrix[:, ::self.per_component].any(axis=1))


def tie(components: int, is_voigt: bool, shared: bool) -> Ties:
    """Free components, or (``shared``) one shift and one width for all: fitted = areas, shift, sigma(, gamma)."""
    size = 4 if is_voigt else 3
    full = components * size
    if not shared:
        return Ties(np.eye(full), components, is_voigt)
    matrix = np.zeros((components + size - 1, full))
    for k in range(components):
        matrix[k, k * size] = 1.0
        for i in range(1, size):
            matrix[components + i - 1, k * size + i] = 1.0
    return Ties(matrix, components, is_voigt)


@dataclass(frozen=True)
class Fits:
    """Result of a batch: ``full`` (j, k, s) parameters, ``covariance`` (j, k s, k s), ``chi2``, ``dof``, ``free``.

    ``converged`` is False where the steps ran out or a free parameter ended on its bound (zero excepted).
    """

    full: FloatArray
    covariance: FloatArray
    chi2: FloatArray
    dof: FloatArray
    free: int
    pixels: FloatArray
    converged: BoolArray

    @property
    def bic(self) -> FloatArray:
        """chi2 + (free parameters) ln(pixels), the Bayesian information criterion up to a constant."""
        return self.chi2 + self.free * np.log(np.maximum(self.pixels, 1.0))


def _evaluate(jobs: Jobs, fitted: FloatArray, base: FloatArray, ties: Ties) -> tuple[FloatArray, FloatArray]:
    """Model (j, p) and its derivatives by the fitted numbers (j, q, p)."""
    j, p = jobs.x.shape
    size = ties.per_component
    full = (base + fitted @ ties.matrix).reshape(j, ties.components, size)
    x = np.concatenate([jobs.x, jobs.nodes.reshape(j, 6)], axis=1)
    depth = np.zeros(x.shape)
    parts = np.empty((j, ties.components * size, p + 6))
    for k in range(ties.components):
        area, centre, sigma = (full[:, k, i, None] for i in range(3))
        if ties.is_voigt:
            value, by_centre, by_sigma, by_gamma = voigt(x, centre, sigma, full[:, k, 3, None])
            parts[:, k * size + 3] = area * by_gamma
        else:
            value, by_centre, by_sigma = gaussian(x, centre, sigma)
        depth += area * value
        parts[:, k * size] = value
        parts[:, k * size + 1] = area * by_centre
        parts[:, k * size + 2] = area * by_sigma
    if ties.matrix.shape[0] != ties.matrix.shape[1]:
        parts = np.matmul(ties.matrix, parts)
    blue, red = depth[:, p:p + 3] @ NODE_WEIGHTS, depth[:, p + 3:] @ NODE_WEIGHTS
    blue_parts, red_parts = parts[:, :, p:p + 3] @ NODE_WEIGHTS, parts[:, :, p + 3:] @ NODE_WEIGHTS
    continuum = 1.0 - (blue[:, None] + (red - blue)[:, None] * jobs.share_red)
    continuum = np.maximum(continuum, 0.05)
    model = (1.0 - depth[:, :p]) / continuum
    lowered = blue_parts[:, :, None] + (red_parts - blue_parts)[:, :, None] * jobs.share_red[:, None, :]
    jacobian = (model[:, None, :] * lowered - parts[:, :, :p]) / continuum[:, None, :]
    return model, jacobian


def _normal(jobs: Jobs, model: FloatArray, jacobian: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
    residual = jobs.y - model
    weighted = jacobian * jobs.weight[:, None, :]
    hessian = np.matmul(weighted, jacobian.transpose(0, 2, 1))
    gradient = np.matmul(weighted, residual[:, :, None])[:, :, 0]
    return hessian, gradient, (jobs.weight * residual**2).sum(axis=1)


def _solve(matrix: FloatArray, vector: FloatArray) -> FloatArray:
    """Batched solve that survives singular matrices by a whisper of a ridge."""
    size = matrix.shape[-1]
    scale = np.maximum(np.einsum("jii->ji", matrix), 1e-300)
    root = 1.0 / np.sqrt(scale)
    unit = matrix * root[:, :, None] * root[:, None, :] + 1e-12 * np.eye(size)
    return np.linalg.solve(unit, (vector * root)[:, :, None])[:, :, 0] * root


def fit_jobs(jobs: Jobs, start: FloatArray, base: FloatArray, ties: Ties, low: FloatArray, high: FloatArray,
             correlation: FloatArray | None = None) -> Fits:
    """Fit every job from ``start`` (j, q) within the bounds ``low``, ``high`` (j, q).

    ``base`` (j, k s) is added to the tied parameters: the components' rest wavelengths. ``correlation`` (lags,) or
    (j, lags) widens the errors for resampled pixels; the side bands' own errors are always carried.
    """
    fitted = np.clip(start, low, high)
    count = fitted.shape[0]
    model, jacobian = _evaluate(jobs, fitted, base, ties)
    hessian, gradient, chi2 = _normal(jobs, model, jacobian)
    damping = np.full(count, 1e-3)
    freedom = np.maximum((jobs.weight > 0).sum(axis=1) - fitted.shape[1], 1.0)
    done = ~np.isfinite(chi2)
    converged = np.zeros(count, bool)
    live = np.flatnonzero(~done)
    part = jobs
    if live.size < count:
        part, hessian, gradient = jobs.take(live), hessian[live], gradient[live]
    for attempt in range(_MAX_STEPS):
        if live.size == 0:
            break
        diagonal = np.einsum("jii->ji", hessian)
        damped = hessian.copy()
        index = np.arange(hessian.shape[1])
        damped[:, index, index] += damping[live, None] * np.maximum(diagonal, 1e-12)
        # a number resting on its bound and pushed outward is held
        now = fitted[live]
        held = ((now <= low[live]) & (gradient < 0)) | ((now >= high[live]) & (gradient > 0))
        push = np.where(held, 0.0, gradient)
        if held.any():
            damped = np.where(held[:, :, None] | held[:, None, :], 0.0, damped)
            damped[:, index, index] += np.where(held, 1.0, 0.0)
        step = _solve(damped, push)
        trial = np.clip(now + step, low[live], high[live])
        new_model, new_jacobian = _evaluate(part, trial, base[live], ties)
        new_hessian, new_gradient, new_chi2 = _normal(part, new_model, new_jacobian)
        old = chi2[live]
        better = new_chi2 <= old
        small = np.abs(old - new_chi2) <= _GAIN * old / freedom[live]
        fitted[live] = np.where(better[:, None], trial, now)
        chi2[live] = np.where(better, new_chi2, old)
        hessian = np.where(better[:, None, None], new_hessian, hessian)
        gradient = np.where(better[:, None], new_gradient, gradient)
        damping[live] = np.where(better, np.maximum(damping[live] * 0.2, 1e-9), damping[live] * 8.0)
        finished = (better & small) | (damping[live] > 1e9)
        converged[live[finished]] = True
        if attempt >= _PATIENCE:
            # centre or width still pressed against its bound: no line of this kind in the window, give up
            pressed = (fitted[live] <= low[live]) | (fitted[live] >= high[live])
            finished |= (pressed & ~_may_rest(fitted[live], low[live], high[live], ties)).any(axis=1)
        keep = ~finished
        if not keep.all():
            live, hessian, gradient = live[keep], hessian[keep], gradient[keep]
            part = part.take(np.flatnonzero(keep))
    return _finish(jobs, fitted, base, ties, low, high, converged, correlation)


def _may_rest(fitted: FloatArray, low: FloatArray, high: FloatArray, ties: Ties) -> BoolArray:
    """Bounds that are an answer, not a failure.

    Zero (no Lorentzian part, no such component), a number held from the start, and the Gaussian part of a Voigt
    profile at its least: the line spread, below which no line can be.
    """
    rest = (fitted == 0.0) | (low >= high)
    if ties.is_voigt:
        sigmas = np.asarray(ties.matrix[:, 2::4].any(axis=1))
        rest |= sigmas & (fitted <= low)
    return rest


def _finish(jobs: Jobs, fitted: FloatArray, base: FloatArray, ties: Ties, low: FloatArray, high: FloatArray,
            converged: BoolArray, correlation: FloatArray | None) -> Fits:
    model, jacobian = _evaluate(jobs, fitted, base, ties)
    hessian, _, chi2 = _normal(jobs, model, jacobian)
    size = hessian.shape[1]
    on_bound = (fitted <= low) | (fitted >= high)
    index = np.arange(size)
    stuck = (on_bound & ~_may_rest(fitted, low, high, ties)).any(axis=1)
    # an area resting at zero keeps its own error
    on_bound &= ~(ties.areas & (low < high))
    masked = np.where(on_bound[:, :, None] | on_bound[:, None, :], 0.0, hessian)
    masked[:, index, index] += np.where(on_bound, 1.0, 0.0)
    scale = 1.0 / np.sqrt(np.maximum(np.einsum("jii->ji", masked), 1e-300))
    unit = masked * scale[:, :, None] * scale[:, None, :] + 1e-12 * np.eye(size)
    unit = np.where(np.isfinite(unit), unit, np.eye(size))
    inverse = np.linalg.inv(unit) * scale[:, :, None] * scale[:, None, :]
    inverse = np.where(on_bound[:, :, None] | on_bound[:, None, :], 0.0, inverse)
    weighted = jacobian * jobs.weight[:, None, :]
    covariance = inverse
    if correlation is not None and np.any(correlation):
        rho = np.broadcast_to(np.atleast_2d(correlation), (fitted.shape[0], np.atleast_2d(correlation).shape[1]))
        noisy = jacobian * np.sqrt(jobs.weight)[:, None, :]
        meat = hessian.copy()
        for k in range(1, rho.shape[1] + 1):
            cross = np.matmul(noisy[:, :, k:], noisy[:, :, :-k].transpose(0, 2, 1)) * rho[:, k - 1, None, None]
            meat += cross + cross.transpose(0, 2, 1)
        covariance = inverse @ meat @ inverse
    # the side bands' own errors move all pixels together: d(F/Fc)/dFband = -(F/Fc) share
    for band, share in ((0, 1.0 - jobs.share_red), (1, jobs.share_red)):
        push = np.matmul(weighted, (jobs.y * share)[:, :, None])[:, :, 0]
        shift = np.einsum("jab,jb->ja", inverse, push)
        covariance = covariance + jobs.band_var[:, band, None, None] * shift[:, :, None] * shift[:, None, :]
    full = (base + fitted @ ties.matrix).reshape(-1, ties.components, ties.per_component)
    pixels = (jobs.weight > 0).sum(axis=1).astype(float)
    return Fits(full=full, covariance=np.einsum("qa,jqr,rb->jab", ties.matrix, covariance, ties.matrix), chi2=chi2,
                dof=np.maximum(pixels - size, 1.0), free=size, pixels=pixels,
                converged=converged & ~stuck & np.isfinite(chi2))
