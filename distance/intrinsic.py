"""What a star of a given type and class looks like without dust: temperature, bolometric correction, colours.

Everything comes from the cited tables in ``data/``. Classes IV and, for temperature, II lie between the tabulated
classes. Where no colours are tabulated for giants (earlier than G0) and supergiants, they follow the dwarfs of the
same (B-V)_0, or, beyond (B-V)_0 of 1.2, the giants of the same type (common practice); Gaia and SDSS magnitudes of
types without a tabulated value follow V-I or B-V through the published transformations named below.
"""

from __future__ import annotations

from dataclasses import dataclass
from functools import cache

import numpy as np
from numpy.typing import NDArray

from starfathom.distance.grid import CELL_LUM, CELL_STEP, LUM_AXIS, N_LUM, N_STEP, STEP_AXIS, along_steps, from_nodes
from starfathom.distance.photometry import BANDS
from starfathom.distance.tables import read_table
from starfathom.templates.subtypes import step_of, t_code_of

FloatArray = NDArray[np.float64]

#: G - V and BP - RP against V - I (constant first), Riello et al. 2021 A&A 649 A3 and its documentation, from memory;
#: they meet the dwarfs of Pecaut & Mamajek within 0.02 mag from A0 to K5.
_G_V_OF_V_I = (-0.01597, -0.02809, -0.2483, 0.03656, -0.002939)
_BP_RP_OF_V_I = (-0.03298, 1.259, -0.1279, 0.01631)
#: V - R against V - I on the dwarfs' sequence serves all classes.
#: Bessell & Brett to 2MASS: Carpenter 2001 AJ 121 2851 as updated in 2003, from memory.
_KS_MINUS_K = -0.039
_J_H_TO_2MASS = (-0.045, 0.980)
_H_K_TO_2MASS = (0.028, 0.996)


@dataclass(frozen=True)
class Intrinsic:
    """Intrinsic properties on the cells of :mod:`starfathom.distance.grid`.

    ``offset[band]`` is ``band - V`` without dust in mag (NaN where no cited colour reaches), ``response[band]`` its
    change per mag of deviation in B-V, ``own_scatter[band]`` the star-to-star scatter in mag that B-V does not
    carry. ``bv_scatter`` is the scatter of B-V itself, ``ln_teff_scatter`` that of ln Teff at given B-V,
    ``ln_teff_per_bv`` the change of ln Teff per mag of deviation in B-V, and ``bc_slope`` is dBC_V/dlnTeff.
    """

    ln_teff: FloatArray
    ln_teff_scatter: FloatArray
    ln_teff_per_bv: FloatArray
    bc_v: FloatArray
    bc_slope: FloatArray
    offset: dict[str, FloatArray]
    response: dict[str, float]
    own_scatter: dict[str, float]
    bv_scatter: FloatArray


def _steps(types: NDArray) -> FloatArray:
    return step_of(np.array([t_code_of(str(t)) for t in types]))


def _sdss_minus_v(b_v: FloatArray, v_r: FloatArray, v_i: FloatArray) -> dict[str, FloatArray]:
    """SDSS g r i z (AB) relative to V: Jordi, Grebel & Ammon 2006 A&A 460 339, from memory."""
    r_i_cousins = v_i - v_r
    g = 0.630 * b_v - 0.124
    r = -v_r + 0.267 * v_r + 0.088
    i = r - (1.007 * r_i_cousins - 0.236)
    z = r - (1.584 * r_i_cousins - 0.386)
    return {"g": g, "r": r, "i": i, "z": z}


def _polynomial(coefficients: tuple[float, ...], x: FloatArray) -> FloatArray:
    return np.polynomial.polynomial.polyval(x, np.array(coefficients))


def _like_dwarfs(b_v: FloatArray, dwarf: dict[str, FloatArray], colour: str) -> FloatArray:
    """A colour of stars with the given B-V as dwarfs of that B-V have it (NaN bluer or redder than B-V 1.2)."""
    good = np.isfinite(dwarf["B-V"]) & np.isfinite(dwarf[colour])
    x, y = dwarf["B-V"][good], dwarf[colour][good]
    order = np.argsort(x)
    return np.where(b_v <= 1.2, np.interp(b_v, x[order], y[order]), np.nan)


def _colour_nodes() -> dict[str, dict[float, FloatArray]]:
    table = read_table("dwarfs")
    steps = _steps(table["type"])
    names = ("B-V", "U-B", "V-R", "V-I", "V-Ks", "J-H", "H-Ks", "G-V", "BP-RP", "G-RP")
    # colours of the hottest stars hardly change with type: the earliest tabulated value stands for those before it
    dwarf = {n: along_steps(steps, table[n]) for n in names}
    evolved = read_table("evolved_colours")
    steps = _steps(evolved["type"])
    nodes: dict[str, dict[float, FloatArray]] = {n: {5.0: dwarf[n]} for n in names}
    for code, name in ((3.0, "III"), (2.0, "II"), (1.6, "Ib"), (1.3, "Iab"), (1.0, "Ia")):
        b_v = along_steps(steps, evolved[f"B-V_{name}"])
        nodes["B-V"][code] = b_v
        u_b = along_steps(steps, evolved["U-B_III" if code >= 2 else "U-B_I"], hold=False)
        if code >= 2:  # the tabulated giants begin at G5; earlier ones share the dwarfs' two-colour line
            u_b = np.where(np.isfinite(u_b), u_b, np.where(STEP_AXIS < 45, _like_dwarfs(b_v, dwarf, "U-B"), np.nan))
        nodes["U-B"][code] = u_b
        late = code == 3.0
        v_i = along_steps(steps, evolved["V-I_III"], hold=False) if late else np.full(N_STEP, np.nan)
        nodes["V-I"][code] = np.where(np.isfinite(v_i), v_i, _like_dwarfs(b_v, dwarf, "V-I"))
        for ours, theirs, shift in (
            ("V-Ks", "V-K_III", (-_KS_MINUS_K, 1.0)),
            ("J-H", "J-H_III", _J_H_TO_2MASS),
            ("H-Ks", "H-K_III", _H_K_TO_2MASS),
        ):
            value = np.full(N_STEP, np.nan)
            if late:
                value = shift[0] + shift[1] * along_steps(steps, evolved[theirs], hold=False)
            nodes[ours][code] = np.where(np.isfinite(value), value, _like_dwarfs(b_v, dwarf, ours))
        if not late:
            for name_late in ("U-B", "V-I", "V-Ks", "J-H", "H-Ks"):
                mine = nodes[name_late][code]
                nodes[name_late][code] = np.where(np.isfinite(mine), mine, nodes[name_late][3.0])
        order = np.argsort(np.nan_to_num(dwarf["V-I"], nan=99.0))
        good = np.isfinite(dwarf["V-I"][order]) & np.isfinite(dwarf["V-R"][order])
        nodes["V-R"][code] = np.interp(nodes["V-I"][code], dwarf["V-I"][order][good], dwarf["V-R"][order][good])
        nodes["V-R"][code] = np.where(np.isfinite(nodes["V-I"][code]), nodes["V-R"][code], np.nan)
        for name_gaia in ("G-V", "BP-RP", "G-RP"):
            nodes[name_gaia][code] = np.full(N_STEP, np.nan)
    for code, v_i in nodes["V-I"].items():
        g_v, bp_rp = _polynomial(_G_V_OF_V_I, v_i), _polynomial(_BP_RP_OF_V_I, v_i)
        # G - RP carries the rest; the mean relation of the dwarfs, 0.56 (BP-RP), holds to 0.02 mag below BP-RP 1.5
        given = nodes["G-V"][code], nodes["BP-RP"][code], nodes["G-RP"][code]
        all_there = np.isfinite(given[0]) & np.isfinite(given[1]) & np.isfinite(given[2])
        for key, known, filler in zip(("G-V", "BP-RP", "G-RP"), given, (g_v, bp_rp, _g_rp_of_bp_rp(bp_rp))):
            nodes[key][code] = np.where(all_there, known, filler)
    return nodes


def _g_rp_of_bp_rp(bp_rp: FloatArray) -> FloatArray:
    """G - RP against BP - RP along the dwarfs of Pecaut & Mamajek."""
    table = read_table("dwarfs")
    good = np.isfinite(table["BP-RP"]) & np.isfinite(table["G-RP"])
    order = np.argsort(table["BP-RP"][good])
    return np.interp(bp_rp, table["BP-RP"][good][order], table["G-RP"][good][order])


def _offsets() -> dict[str, FloatArray]:
    cells = {name: from_nodes(nodes, skip_gaps=False) for name, nodes in _colour_nodes().items()}
    out = {"V": np.zeros(N_STEP * N_LUM), "B": cells["B-V"], "U": cells["U-B"] + cells["B-V"]}
    out["R"], out["I"], out["Ks"] = -cells["V-R"], -cells["V-I"], -cells["V-Ks"]
    out["H"] = out["Ks"] + cells["H-Ks"]
    out["J"] = out["H"] + cells["J-H"]
    out["G"] = cells["G-V"]
    out["RP"] = out["G"] - cells["G-RP"]
    out["BP"] = out["RP"] + cells["BP-RP"]
    out.update(_sdss_minus_v(cells["B-V"], cells["V-R"], cells["V-I"]))
    return {band: out[band] for band in BANDS}


def _temperatures() -> tuple[FloatArray, FloatArray]:
    ln_teff, bc = {}, {}
    for name, codes in (("dwarfs", (5.0,)), ("giants", (3.0,)), ("supergiants", (1.6, 1.3, 1.0))):
        table = read_table(name)
        steps = _steps(table["type"])
        for code in codes:
            ln_teff[code] = along_steps(steps, np.log(table["teff_k"]))
            bc[code] = along_steps(steps, table["bc_v"])
    return from_nodes(ln_teff), from_nodes(bc)


def _bc_slope(ln_teff: FloatArray) -> FloatArray:
    """dBC_V/dlnTeff on the dwarfs' relation, smoothed over a tenth in ln Teff."""
    table = read_table("dwarfs")
    order = np.argsort(table["teff_k"])
    x, y = np.log(table["teff_k"][order]), table["bc_v"][order]
    return (np.interp(ln_teff + 0.05, x, y) - np.interp(ln_teff - 0.05, x, y)) / 0.1


@cache
def intrinsic() -> Intrinsic:
    """The intrinsic properties, built from the tables once."""
    ln_teff, bc = _temperatures()
    offset = _offsets()
    dwarf_line = (CELL_LUM == 5.0) & (CELL_STEP >= 28) & (CELL_STEP <= 55)
    b_v = offset["B"][dwarf_line]
    response = {}
    for band in BANDS:
        x, y = b_v - b_v.mean(), offset[band][dwarf_line]
        response[band] = float((x * (y - y.mean())).sum() / (x * x).sum())
    step, lum = CELL_STEP, CELL_LUM
    # scatter of ln Teff within a type at given B-V: 2 % from F to K, 4 % in O to A, 4 % for M and supergiants (common
    # practice)
    scatter = np.where((step >= 30) & (step < 57), 0.02, 0.04)
    scatter = np.where(lum < 2.5, np.maximum(scatter, 0.04), scatter)
    warm = np.clip(np.minimum((step - 25) / 5, (57 - step) / 2), 0, 1)
    own = dict.fromkeys(BANDS, 0.02)
    own.update({"U": 0.06, "V": 0.0, "B": 0.0, "J": 0.03, "H": 0.03, "Ks": 0.03})
    bv_scatter = np.interp(
        step, [2, 10, 18, 22, 30, 40, 50, 56, 66], [0.02, 0.02, 0.025, 0.035, 0.035, 0.035, 0.05, 0.06, 0.06]
    )
    bv_scatter = np.where(lum < 4.5, np.interp(step, [2, 18, 25, 40, 66], [0.02, 0.03, 0.05, 0.05, 0.06]), bv_scatter)
    bv_scatter = np.where(lum < 2.5, np.maximum(bv_scatter, 0.05), bv_scatter)
    bv_scatter = np.where((lum < 2.5) & (step > 30), 0.10, bv_scatter)
    return Intrinsic(
        ln_teff=ln_teff,
        ln_teff_scatter=scatter,
        ln_teff_per_bv=-0.5 * warm,
        bc_v=bc,
        bc_slope=_bc_slope(ln_teff),
        offset=offset,
        response=response,
        own_scatter=own,
        bv_scatter=bv_scatter,
    )


def bands_reaching(lum_code: float, step: float) -> tuple[str, ...]:
    """Bands with a cited intrinsic colour at a type."""
    i = int(np.argmin(np.abs(STEP_AXIS - step))) * N_LUM + int(np.argmin(np.abs(LUM_AXIS - lum_code)))
    return tuple(b for b, o in intrinsic().offset.items() if np.isfinite(o[i]))
