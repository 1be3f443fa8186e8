"""Levenberg-Marquardt fits of many line profiles at once.

A job is one window of one spectrum: the normalised flux F/Fc over P pixels and K components. All jobs of a batch
share K, the profile and the way parameters are tied, and go through every step together; finished jobs drop out.

A Voigt line's wings reach the side bands and lower the pseudo-continuum by which the flux was divided. The fit
therefore goes round: the mean depths of the fitted profiles in the side bands are put back into the continuum (the
same straight line through both), and the line is fitted again, until nothing changes. The area of a broad line is
then not lost, and any other fitter given that continuum finds the same profile.
"""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np
from numpy.typing import NDArray

from starfathom.classify.lines.profiles import gaussian_parts, voigt

FloatArray = NDArray[np.float64]
BoolArray = NDArray[np.bool_]

_MAX_STEPS = 40
# stop when a step gains less than this times chi2 per degree of freedom: no parameter then moves by more than
# 0.3 per cent of the error that the residuals allow it
_GAIN = 1e-5
_TINY = 1e-9
_PATIENCE = 5
_MAX_ROUNDS = 15
_LOSS_TOLERANCE = 1e-4


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

    ``evidence_chi2`` lets the side bands move within their errors and is what profiles are compared by.
    ``loss`` (j, 2) is the mean depth of the profiles in the blue and the red side band.
    ``converged`` is False where the steps ran out or a free parameter ended on its bound (zero excepted).
    """

    full: FloatArray
    covariance: FloatArray
    chi2: FloatArray
    evidence_chi2: FloatArray
    dof: FloatArray
    free: int
    pixels: FloatArray
    loss: FloatArray
    converged: BoolArray

    @property
    def bic(self) -> FloatArray:
        """chi2 + (free parameters) ln(pixels), the Bayesian information criterion up to a constant."""
        return self.evidence_chi2 + self.free * np.log(np.maximum(self.pixels, 1.0))


def _depth(x: FloatArray, fitted: FloatArray, base: FloatArray, ties: Ties) -> tuple[FloatArray, FloatArray]:
    """Summed depth (j, p) of the profiles at ``x`` and its derivatives by the fitted numbers (j, q, p)."""
    j, p = x.shape
    size = ties.per_component
    full = (base + fitted @ ties.matrix).reshape(j, ties.components, size)
    depth = np.zeros(x.shape)
    parts = np.empty((j, ties.components * size, p))
    for k in range(ties.components):
        area, centre, sigma = (full[:, k, i, None] for i in range(3))
        first = k * size
        if ties.is_voigt:
            value, by_centre, by_sigma, by_gamma = voigt(x, centre, sigma, full[:, k, 3, None])
            np.multiply(area, by_gamma, out=parts[:, first + 3])
            parts[:, first] = value
            np.multiply(area, by_centre, out=parts[:, first + 1])
            np.multiply(area, by_sigma, out=parts[:, first + 2])
            depth += area * value
        else:
            scaled = gaussian_parts(x, centre, sigma, area, parts[:, first:first + 3])
            depth += scaled
    if ties.matrix.shape[0] != ties.matrix.shape[1]:
        parts = np.matmul(ties.matrix, parts)
    return depth, parts


def _band_depths(jobs: Jobs, fitted: FloatArray, base: FloatArray, ties: Ties) -> tuple[FloatArray, FloatArray]:
    """Mean depth of the profiles in each side band (j, 2) and its derivatives (j, q, 2)."""
    depth, parts = _depth(jobs.nodes.reshape(-1, 6), fitted, base, ties)
    j, q = parts.shape[:2]
    return depth.reshape(j, 2, 3) @ NODE_WEIGHTS, parts.reshape(j, q, 2, 3) @ NODE_WEIGHTS


def _line(at_blue: FloatArray, at_red: FloatArray, share_red: FloatArray) -> FloatArray:
    return at_blue + (at_red - at_blue) * share_red


@dataclass
class _Problem:
    """Least squares in depth: ``target`` and ``weight`` already on the raised continuum."""

    x: FloatArray
    target: FloatArray
    weight: FloatArray
    base: FloatArray
    low: FloatArray
    high: FloatArray
    ties: Ties

    def take(self, rows: NDArray[np.intp] | BoolArray) -> _Problem:
        return _Problem(self.x[rows], self.target[rows], self.weight[rows], self.base[rows], self.low[rows],
                        self.high[rows], self.ties)

    def normal(self, fitted: FloatArray) -> tuple[FloatArray, FloatArray, FloatArray]:
        """Hessian (j, q, q), gradient (j, q) and chi2 (j,)."""
        depth, parts = _depth(self.x, fitted, self.base, self.ties)
        residual = self.target - depth
        weighted = parts * self.weight[:, None, :]
        hessian = np.matmul(weighted, parts.transpose(0, 2, 1))
        gradient = np.matmul(weighted, residual[:, :, None])[:, :, 0]
        return hessian, gradient, np.einsum("jp,jp,jp->j", self.weight, residual, residual)


def _problem(jobs: Jobs, loss: FloatArray, base: FloatArray, low: FloatArray, high: FloatArray, ties: Ties) -> _Problem:
    """``loss`` (j, 2) is what the profiles take from the side bands: the continuum is 1 / (1 - loss) of the given."""
    kept = 1.0 - _line(loss[:, :1], loss[:, 1:], jobs.share_red)
    return _Problem(jobs.x, 1.0 - jobs.y * kept, jobs.weight / kept**2, base, low, high, ties)


def _solve(matrix: FloatArray, vector: FloatArray) -> FloatArray:
    """Batched solve that survives singular matrices by a whisper of a ridge."""
    size = matrix.shape[-1]
    scale = np.maximum(np.einsum("jii->ji", matrix), 1e-300)
    root = 1.0 / np.sqrt(scale)
    unit = matrix * root[:, :, None] * root[:, None, :]
    index = np.arange(size)
    unit[:, index, index] += 1e-12
    return np.linalg.solve(unit, (vector * root)[:, :, None])[:, :, 0] * root


def _descend(problem: _Problem, start: FloatArray,
             to_beat: FloatArray | None = None) -> tuple[FloatArray, BoolArray]:
    """Levenberg-Marquardt from ``start`` (j, q) within the bounds: fitted numbers and whether each job converged.

    After a few steps jobs that are not clearly below ``to_beat`` (j,) in chi2 are dropped.
    """
    fitted = start.copy()
    hessian, gradient, chi2 = problem.normal(fitted)
    count, size = fitted.shape
    if not (problem.low < problem.high)[:, ~problem.ties.areas].any():
        return _linear(problem, fitted, hessian, gradient), np.isfinite(chi2)
    damping = np.full(count, 1e-3)
    freedom = np.maximum((problem.weight > 0).sum(axis=1) - size, 1.0)
    converged = np.zeros(count, bool)
    index = np.arange(size)
    live = np.flatnonzero(np.isfinite(chi2))
    part = problem
    if live.size < count:
        part, hessian, gradient = problem.take(live), hessian[live], gradient[live]
    for attempt in range(_MAX_STEPS):
        if live.size == 0:
            break
        now, old, damp = fitted[live], chi2[live], damping[live]
        damped = hessian.copy()
        damped[:, index, index] *= 1.0 + damp[:, None]
        damped[:, index, index] += 1e-12
        # a number resting on its bound and pushed outward is held
        held = ((now <= part.low) & (gradient < 0)) | ((now >= part.high) & (gradient > 0))
        push = gradient
        if held.any():
            push = np.where(held, 0.0, gradient)
            damped[held[:, :, None] | held[:, None, :]] = 0.0
            damped[:, index, index] += held
        trial = np.clip(now + _solve(damped, push), part.low, part.high)
        new_hessian, new_gradient, new_chi2 = part.normal(trial)
        better = new_chi2 <= old
        gain = old - new_chi2
        small = (np.abs(gain) <= np.maximum(_GAIN * old / freedom[live], _TINY)) & (damp <= 0.01)
        accepted = np.flatnonzero(better)
        at = live[accepted]
        fitted[at], chi2[at] = trial[accepted], new_chi2[accepted]
        hessian[accepted], gradient[accepted] = new_hessian[accepted], new_gradient[accepted]
        damping[live] = np.where(better, np.maximum(damp * 0.1, 1e-9), damp * 8.0)
        finished = small | (damp > 1e7)
        converged[live[finished]] = True
        if attempt >= _PATIENCE:
            # centre or width still pressed against its bound: no line of this kind in the window, give up
            now = fitted[live]
            pressed = (now <= part.low) | (now >= part.high)
            finished |= (pressed & ~_may_rest(now, part.low, part.high, part.ties)).any(axis=1)
        if attempt >= _PATIENCE and to_beat is not None:
            finished |= to_beat[live] - chi2[live] < 2.0 * np.maximum(chi2[live] / freedom[live], 1.0)
        if finished.any():
            keep = ~finished
            live, hessian, gradient = live[keep], hessian[keep], gradient[keep]
            part = part.take(keep)
    return fitted, converged


def _linear(problem: _Problem, start: FloatArray, hessian: FloatArray, gradient: FloatArray) -> FloatArray:
    """One exact step where only areas are free; an area that would leave its bound is held there, the rest solved."""
    free = problem.low < problem.high
    index = np.arange(start.shape[1])
    for _ in range(int(problem.ties.areas.sum())):
        outside = ~free[:, :, None] | ~free[:, None, :]
        matrix = np.where(outside, 0.0, hessian)
        matrix[:, index, index] += ~free
        trial = start + _solve(matrix, np.where(free, gradient, 0.0))
        beyond = free & ((trial < problem.low) | (trial > problem.high))
        if not beyond.any():
            break
        moved = np.where(beyond, np.clip(trial, problem.low, problem.high), start)
        gradient = gradient - np.einsum("jab,jb->ja", hessian, moved - start)
        start, free = moved, free & ~beyond
    return np.clip(trial, problem.low, problem.high)


def fit_jobs(jobs: Jobs, start: FloatArray, base: FloatArray, ties: Ties, low: FloatArray, high: FloatArray,
             correlation: FloatArray | None = None, to_beat: FloatArray | None = None) -> Fits:
    """Fit every job from ``start`` (j, q) within the bounds ``low``, ``high`` (j, q).

    ``base`` (j, k s) is added to the tied parameters: the components' rest wavelengths. ``correlation`` (lags,) or
    (j, lags) widens the errors for resampled pixels; the side bands' own errors are always carried. ``to_beat`` (j,) is
    the chi2 of a simpler profile: jobs that do not come clearly below it are dropped (not converged).
    """
    fitted = np.clip(start, low, high)
    count, size = fitted.shape
    loss = np.zeros((count, 2))
    before = np.full((count, 2), np.nan)
    converged = np.zeros(count, bool)
    rows = np.arange(count)
    for turn in range(_MAX_ROUNDS):
        part = jobs if rows.size == count else jobs.take(rows)
        problem = _problem(part, loss[rows], base[rows], low[rows], high[rows], ties)
        fitted[rows], converged[rows] = _descend(problem, fitted[rows], to_beat if turn == 0 else None)
        now = np.clip(_band_depths(part, fitted[rows], base[rows], ties)[0], -1.0, 0.7)
        step = now - loss[rows]
        going = converged[rows] & (np.abs(step).max(axis=1) > _LOSS_TOLERANCE)
        if turn == 0 and to_beat is not None:
            depth, _ = _depth(part.x, fitted, base, ties)
            chi2 = (problem.weight * (problem.target - depth) ** 2).sum(axis=1)
            dof = np.maximum((jobs.weight > 0).sum(axis=1) - size, 1.0)
            hopeless = to_beat - chi2 < 2.0 * np.maximum(chi2 / dof, 1.0)
            converged &= ~hopeless
            going &= ~hopeless
        # the rounds approach their end geometrically: jump there as soon as the ratio is known
        with np.errstate(invalid="ignore", divide="ignore"):
            ratio = np.nan_to_num(np.clip(step / before[rows], 0.0, 0.8))
        before[rows] = step if turn == 0 else np.nan
        if turn >= 1:
            now = np.clip(now + np.where(ratio > 0, step * ratio / (1.0 - ratio), 0.0), -1.0, 0.7)
            before[rows] = np.nan
        loss[rows] = now
        rows = rows[going]
        if rows.size == 0:
            break
    converged[rows] = False
    return _finish(jobs, fitted, loss, base, ties, low, high, converged, correlation)


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


def _finish(jobs: Jobs, fitted: FloatArray, loss: FloatArray, base: FloatArray, ties: Ties, low: FloatArray,
            high: FloatArray, converged: BoolArray, correlation: FloatArray | None) -> Fits:
    """Covariance, with what the round by the continuum adds to it.

    The fit solves J^T W r = 0, where r depends on the parameters p through the depth and through the raised continuum:
    dr/dp = -(J - y dloss/dp). Errors e of the pixels then move p by (J^T W (J - y dloss/dp))^-1 J^T W e.
    """
    problem = _problem(jobs, loss, base, low, high, ties)
    depth, jacobian = _depth(jobs.x, fitted, base, ties)
    _, band_parts = _band_depths(jobs, fitted, base, ties)
    size = fitted.shape[1]
    index = np.arange(size)
    on_bound = (fitted <= low) | (fitted >= high)
    stuck = (on_bound & ~_may_rest(fitted, low, high, ties)).any(axis=1)
    # an area resting at zero keeps its own error
    on_bound &= ~(ties.areas & (low < high))
    weighted = jacobian * problem.weight[:, None, :]
    meat = np.matmul(weighted, jacobian.transpose(0, 2, 1))
    response = meat.copy()
    if np.abs(band_parts).max(initial=0.0) > 1e-5:
        lowered = _line(band_parts[:, :, :1], band_parts[:, :, 1:], jobs.share_red[:, None, :])
        response -= np.matmul(weighted, (jobs.y[:, None, :] * lowered).transpose(0, 2, 1))
    outside = on_bound[:, :, None] | on_bound[:, None, :]
    response = np.where(outside, 0.0, response)
    response[:, index, index] += on_bound
    scale = 1.0 / np.sqrt(np.maximum(np.abs(np.einsum("jii->ji", response)), 1e-300))
    unit = response * scale[:, :, None] * scale[:, None, :] + 1e-12 * np.eye(size)
    unit = np.where(np.isfinite(unit), unit, np.eye(size))
    inverse = np.where(outside, 0.0, np.linalg.inv(unit) * scale[:, :, None] * scale[:, None, :])
    if correlation is not None and np.any(correlation):
        rho = np.broadcast_to(np.atleast_2d(correlation), (fitted.shape[0], np.atleast_2d(correlation).shape[1]))
        noisy = jacobian * np.sqrt(problem.weight)[:, None, :]
        for k in range(1, rho.shape[1] + 1):
            cross = np.matmul(noisy[:, :, k:], noisy[:, :, :-k].transpose(0, 2, 1)) * rho[:, k - 1, None, None]
            meat = meat + cross + cross.transpose(0, 2, 1)
    covariance = inverse @ meat @ inverse.transpose(0, 2, 1)
    # the side bands' own errors move all pixels together
    seen = 1.0 - problem.target
    modes = np.stack([seen * (1.0 - jobs.share_red), seen * jobs.share_red], axis=1)
    push = np.matmul(weighted, modes.transpose(0, 2, 1))
    shift = inverse @ push
    covariance = covariance + np.matmul(shift * jobs.band_var[:, None, :], shift.transpose(0, 2, 1))
    full = (base + fitted @ ties.matrix).reshape(-1, ties.components, ties.per_component)
    pixels = (jobs.weight > 0).sum(axis=1).astype(float)
    residual = problem.target - depth
    chi2 = (problem.weight * residual**2).sum(axis=1)
    # what is left when the side bands may move within their errors and the line with them: a wrong pseudo-continuum
    # is a pedestal that a profile with wings would otherwise explain better than one without
    held = modes * problem.weight[:, None, :]
    stiff = np.matmul(held, modes.transpose(0, 2, 1)) - np.matmul(push.transpose(0, 2, 1), shift)
    stiff[:, [0, 1], [0, 1]] += 1.0 / np.maximum(jobs.band_var, 1e-30)
    lean = np.matmul(held, residual[:, :, None])
    gain = np.matmul(lean.transpose(0, 2, 1), np.linalg.solve(np.where(np.isfinite(stiff), stiff, np.eye(2)), lean))
    evidence = np.clip(chi2 - np.nan_to_num(gain[:, 0, 0]), 0.0, chi2)
    return Fits(full=full, covariance=np.einsum("qa,jqr,rb->jab", ties.matrix, covariance, ties.matrix), chi2=chi2,
                evidence_chi2=evidence, dof=np.maximum(pixels - size, 1.0), free=size, pixels=pixels, loss=loss,
                converged=converged & ~stuck & np.isfinite(chi2))
