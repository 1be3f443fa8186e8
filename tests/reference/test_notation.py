"""Published spectral types of well-known stars, as printed, and what they mean.

The strings are those in use for these stars in the literature and in SIMBAD (from memory; the notation is what is
tested, not the type). Codes follow from the convention O0 = 0, B0 = 10 ... M0 = 60 and Ia0 = 0 ... V = 5.
"""

from __future__ import annotations

import math

import pytest

from starfathom.classify.mktype import MKType

# star, type as printed, t_code, t_code_hi, lum_code, peculiarities
STARS = [
    ("Sun", "G2 V", 42, 42, 5, ()),
    ("Vega", "A0 Va", 20, 20, 5, ()),
    ("Sirius", "A0mA1 Va", 20, 20, 5, ()),
    ("Arcturus", "K1.5 III Fe-0.5", 51.5, 51.5, 3, ("Fe-0.5",)),
    ("Betelgeuse", "M1-M2Ia-Iab", 61, 62, 1.15, ()),
    ("Rigel", "B8Ia", 18, 18, 1, ()),
    ("Deneb", "A2Ia", 22, 22, 1, ()),
    ("Procyon", "F5IV-V", 35, 35, 4.5, ()),
    ("Pollux", "K0III", 50, 50, 3, ()),
    ("Aldebaran", "K5+III", 55, 55, 3, ()),
    ("Canopus", "A9II", 29, 29, 2, ()),
    ("zeta Pup", "O4I(n)fp", 4, 4, 1.3, ("(n)", "f", "p")),
    ("theta1 Ori C", "O7Vp", 7, 7, 5, ("p",)),
    ("10 Lac", "O9V", 9, 9, 5, ()),
    ("P Cyg", "B1-2Ia-0ep", 11, 12, 0, ("ep",)),
    ("zeta1 Sco", "B1.5Ia+", 11.5, 11.5, 0, ()),
    ("rho Cas", "G2Ia0e", 42, 42, 0, ("e",)),
    ("gamma Cas", "B0.5IVpe", 10.5, 10.5, 4, ("pe",)),
    ("alpha2 CVn", "A0pSiEuHg", 20, 20, math.nan, ("p", "Si", "Eu", "Hg")),
    ("epsilon UMa", "A1III-IVpkB9", 21, 21, 3.5, ("p", "kB9")),
    ("lambda Boo", "A0Va_lB", 20, 20, 5, None),
    ("61 Cyg A", "K5V", 55, 55, 5, ()),
    ("Barnard's star", "M4V", 64, 64, 5, ()),
    ("Proxima", "M5.5Ve", 65.5, 65.5, 5, ("e",)),
    ("HD 140283", "sdF3", 33, 33, 6, ()),
    ("Kapteyn's star", "sdM1", 61, 61, 6, ()),
    ("Altair", "A7Vn", 27, 27, 5, ("n",)),
    ("Regulus", "B8IVn", 18, 18, 4, ("n",)),
    ("zeta Cap", "G4Ib:Ba2", 44, 44, 1.6, ("Ba2",)),
    ("phi1 Ori", "O8III((f))", 8, 8, 3, ("((f))",)),
]


@pytest.mark.parametrize("star,text,t,t_hi,lum,marks", STARS, ids=[s[0] for s in STARS])
def test_types_of_known_stars(star, text, t, t_hi, lum, marks):
    mk = MKType.parse(text)
    assert (mk.t_code, mk.t_code_hi, mk.lum_code) == pytest.approx((t, t_hi, lum), nan_ok=True)
    if marks is not None:
        assert mk.peculiarities == marks and mk.rest == ""
    assert MKType.parse(str(mk)) == mk


@pytest.mark.parametrize(
    "star,text,kinds",
    [
        ("Mira", "M5-9IIIe+DA", ("star", "white dwarf")),
        ("Sirius B", "DA1.9", ("white dwarf",)),
        ("Procyon B", "DQZ", ("white dwarf",)),
        ("gamma2 Vel", "WC8+O7.5III", ("Wolf-Rayet", "star")),
        ("Capella", "G3III:+G0III", ("star", "star")),
        ("R Lep", "C7,6e", ("carbon star",)),
        ("chi Cyg", "S6,2", ("S star",)),
        ("Gliese 229 B", "T7", ("ultracool dwarf",)),
        ("2M1207 A", "L5", ("ultracool dwarf",)),
        ("HZ 44", "sdO", ("hot subdwarf",)),
        ("Albireo A", "K2II+B", ("star", "star")),
    ],
)
def test_kinds_of_known_stars(star, text, kinds):
    mk = MKType.parse(text)
    assert (mk.kind, *(c.kind for c in mk.composite)) == kinds


def test_codes_agree_with_the_subtype_table():
    from starfathom.templates.subtypes import CLASSES, LUM_CODES, SUBTYPES, T_CODES

    for subtype, code in zip(SUBTYPES, T_CODES):
        assert MKType.parse(subtype).t_code == pytest.approx(code)
    for name, code in zip(CLASSES, LUM_CODES):
        assert MKType.parse("G0 " + name).lum_code == code
