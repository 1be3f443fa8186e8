"""MK notation is read as the trade means it and printed without loss."""

from __future__ import annotations

import math
import re
import time

import pytest
from hypothesis import given, settings
from hypothesis import strategies as st

from starfathom.classify.errors import RequestError
from starfathom.classify.mktype import MAX_LENGTH, MKType

NAN = float("nan")

# text, printed, t_code, t_code_hi, lum_code, lum_code_hi
STARS = [
    ("G2V", "G2 V", 42, 42, 5, 5),
    ("G2 V", "G2 V", 42, 42, 5, 5),
    ("O2", "O2", 2, 2, NAN, NAN),
    ("O9.7Ibn(f)p", "O9.7 Ibn(f)p", 9.7, 9.7, 1.6, 1.6),
    ("B0.5 Ia0", "B0.5 Ia0", 10.5, 10.5, 0, 0),
    ("B1Ia+", "B1 Ia0", 11, 11, 0, 0),
    ("F8 0-Ia", "F8 Ia0", 38, 38, 0, 0),
    ("F8 Ia-0", "F8 Ia0", 38, 38, 0, 0),
    ("G5 0", "G5 Ia0", 45, 45, 0, 0),
    ("A0Ia", "A0 Ia", 20, 20, 1, 1),
    ("O9.5Iab:", "O9.5 Iab:", 9.5, 9.5, 1.3, 1.3),
    ("K5I", "K5 I", 55, 55, 1.3, 1.3),
    ("F5Ib", "F5 Ib", 35, 35, 1.6, 1.6),
    ("F8Ib-II", "F8 Ib-II", 38, 38, 1.8, 1.8),
    ("M1Ia-Iab", "M1 Ia-Iab", 61, 61, 1.15, 1.15),
    ("M2Iab/b", "M2 Iab/Ib", 62, 62, 1.3, 1.6),
    ("G0II", "G0 II", 40, 40, 2, 2),
    ("K2III-IV", "K2 III-IV", 52, 52, 3.5, 3.5),
    ("K0-K1 III-IV", "K0-K1 III-IV", 50, 51, 3.5, 3.5),
    ("G0V-IV", "G0 V-IV", 40, 40, 4.5, 4.5),
    ("A3IV/V", "A3 IV/V", 23, 23, 4, 5),
    ("M3IIIab", "M3 IIIab", 63, 63, 3, 3),
    ("K0IIIb", "K0 IIIb", 50, 50, 3, 3),
    ("K1 IIIa", "K1 IIIa", 51, 51, 3, 3),
    ("A0Va", "A0 Va", 20, 20, 5, 5),
    ("K0VI", "K0 VI", 50, 50, 6, 6),
    ("sdF8", "sdF8", 38, 38, 6, 6),
    ("esdM4", "esdM4", 64, 64, 6, 6),
    ("usdM5", "usdM5", 65, 65, 6, 6),
    ("dM4.5e", "dM4.5e", 64.5, 64.5, 5, 5),
    ("gK5", "gK5", 55, 55, 3, 3),
    ("sgG5", "sgG5", 45, 45, 4, 4),
    ("cF5", "cF5", 35, 35, 1.3, 1.3),
    ("wF5V", "wF5 V", 35, 35, 5, 5),
    ("G8/K0 III:", "G8/K0 III:", 48, 50, 3, 3),
    ("G8/K0(III)", "G8/K0 (III)", 48, 50, 3, 3),
    ("B8/9(III/IV)", "B8/B9 (III/IV)", 18, 19, 3, 4),
    ("A0/1V", "A0/A1 V", 20, 21, 5, 5),
    ("K7-M0V", "K7-M0 V", 57, 60, 5, 5),
    ("F5-G", "F5-G", 35, 49, NAN, NAN),
    ("K(2)III", "K(2) III", 52, 52, 3, 3),
    ("G8+ III", "G8+ III", 48, 48, 3, 3),
    ("K0- III", "K0- III", 50, 50, 3, 3),
    ("M10III", "M10 III", 70, 70, 3, 3),
    ("K III", "K III", 50, 59, 3, 3),
    ("M", "M", 60, 69, NAN, NAN),
    ("A/F", "A/F", 20, 39, NAN, NAN),
    ("kA5hF0mF2", "kA5hF0mF2", 30, 30, NAN, NAN),
    ("kA2hA5mA7V", "kA2hA5mA7 V", 25, 25, 5, 5),
    ("kA3mF0", "kA3mF0", 23, 23, NAN, NAN),
    ("A1mA5-F2 IV", "A1mA5-F2 IV", 21, 21, 4, 4),
    ("A1m", "A1m", 21, 21, NAN, NAN),
    ("ON9.7 Iab", "ON9.7 Iab", 9.7, 9.7, 1.3, 1.3),
    ("BC1.5Ib", "BC1.5 Ib", 11.5, 11.5, 1.6, 1.6),
    ("OB-", "OB-", 0, 19, NAN, NAN),
    ("g2v", "G2 V", 42, 42, 5, 5),
    ("k0iii", "K0 III", 50, 50, 3, 3),
    ("m4.5 ve", "M4.5 Ve", 64.5, 64.5, 5, 5),
    ("b2iv", "B2 IV", 12, 12, 4, 4),
    ("f8ib", "F8 Ib", 38, 38, 1.6, 1.6),
    ("  G2   V ", "G2 V", 42, 42, 5, 5),
    ("A2IA", "A2 Ia", 22, 22, 1, 1),
    ("F8IAB", "F8 Iab", 38, 38, 1.3, 1.3),
    ("B3IA0", "B3 Ia0", 13, 13, 0, 0),
    ("K2 IIIB", "K2 IIIb", 52, 52, 3, 3),
    ("B1V-B2V", "B1-B2 V", 11, 12, 5, 5),
    ("G8III/K0III", "G8/K0 III", 48, 50, 3, 3),
    ("G2_V", "G2 V", 42, 42, 5, 5),
    ("K0–K1 III", "K0-K1 III", 50, 51, 3, 3),
    ("G 2 V", "G2 V", 42, 42, 5, 5),
    ("K0:III:", "K0: III:", 50, 50, 3, 3),
    ("G5?", "G5?", 45, 45, NAN, NAN),
]


@pytest.mark.parametrize("text,printed,t,t_hi,lum,lum_hi", STARS, ids=[s[0] for s in STARS])
def test_stars(text, printed, t, t_hi, lum, lum_hi):
    mk = MKType.parse(text)
    assert str(mk) == printed
    assert (mk.t_code, mk.t_code_hi) == pytest.approx((t, t_hi), abs=1e-9, nan_ok=True)
    assert (mk.lum_code, mk.lum_code_hi) == pytest.approx((lum, lum_hi), abs=1e-9, nan_ok=True)
    assert mk.kind == "star" and mk.rest == ""
    assert MKType.parse(printed) == mk


PECULIAR = [
    ("M4.5 Ve", ("e",)),
    ("O6.5 V((f))z", ("((f))", "z")),
    ("A0Vp(SiCr)", ("p", "(SiCr)")),
    ("B2IV-Vne", ("n", "e")),
    ("G8III-IVCN", ("CN",)),
    ("K1IIICN0.5", ("CN0.5",)),
    ("K0 III CN-1 CH1", ("CN-1", "CH1")),
    ("G9.5 IIIa Fe-0.5", ("Fe-0.5",)),
    ("K0IIIbBa0.3", ("Ba0.3",)),
    ("G2VFe-1.2CH-0.5", ("Fe-1.2", "CH-0.5")),
    ("B8IIIpHgMn", ("p", "HgMn")),
    ("Ap SrEuCr", ("p", "SrEuCr")),
    ("O4If+", ("f+",)),
    ("O5V((fc))", ("((fc))",)),
    ("O7.5III(n)((f))", ("(n)", "((f))")),
    ("B6Vnn", ("nn",)),
    ("B1.5IVep", ("ep",)),
    ("A7Vvar", ("var",)),
    ("A2Vs", ("s",)),
    ("B0[e]", ("[e]",)),
    ("Be", ("e",)),
    ("Am", ("m",)),
    ("B5Ve shell", ("e", "shell")),
    ("F0IV-V(n)k", ("(n)", "k")),
    ("A0Va+n", ("n",)),
    ("B9p HgMn", ("p", "HgMn")),
    ("F0III Sr", ("Sr",)),
    ("A1m", ("m",)),
    ("B2IV Hewk", ("Hewk",)),
    ("K0III:var", ("var",)),
    ("G8IIIBa1", ("Ba1",)),
    ("F0 V λ Boo", ("λ Boo",)),
    ("F0 V lam Boo", ("lam Boo",)),
    ("M7IIIevar", ("e", "var")),
    ("dMe", ("e",)),
    ("B[e]sg", ("[e]", "sg")),
]


@pytest.mark.parametrize("text,marks", PECULIAR, ids=[p[0] for p in PECULIAR])
def test_peculiarities(text, marks):
    mk = MKType.parse(text)
    assert mk.peculiarities == marks and mk.rest == ""
    assert MKType.parse(str(mk)) == mk
    for mark in marks:
        assert mark in str(mk)


@pytest.mark.parametrize(
    "text,printed,rest",
    [
        ("B9.5V+...", "B9.5 V +...", "+..."),
        ("K0/1III+..", "K0/K1 III +..", "+.."),
        ("A3m A5-A9", "A3m A5-A9", "A5-A9"),
        ("O2If*/WN5", "O2 If*/WN5", "/WN5"),
        ("G2 V banana", "G2 V banana", "banana"),
        ("K0 III e blue haze", "K0 III e blue haze", "blue haze"),
    ],
)
def test_what_has_no_meaning_is_kept(text, printed, rest):
    mk = MKType.parse(text)
    assert (str(mk), mk.rest) == (printed, rest)
    assert MKType.parse(printed) == mk


@pytest.mark.parametrize(
    "text,kind,letter,subtype",
    [
        ("DA3", "white dwarf", "D", 3),
        ("DA3.5", "white dwarf", "D", 3.5),
        ("DA.8", "white dwarf", "D", 0.8),
        ("DBAZ4", "white dwarf", "D", 4),
        ("DQ", "white dwarf", "D", NAN),
        ("WD", "white dwarf", "D", NAN),
        ("DAZ", "white dwarf", "D", NAN),
        ("DC9", "white dwarf", "D", 9),
        ("sdB", "hot subdwarf", "B", NAN),
        ("sdO", "hot subdwarf", "O", NAN),
        ("sdOB", "hot subdwarf", "O", NAN),
        ("sdB5", "hot subdwarf", "B", 5),
        ("WN5", "Wolf-Rayet", "W", 5),
        ("WC8", "Wolf-Rayet", "W", 8),
        ("WN6ha", "Wolf-Rayet", "W", 6),
        ("WO2", "Wolf-Rayet", "W", 2),
        ("C-N5", "carbon star", "C", 5),
        ("C5,4J", "carbon star", "C", 5),
        ("R5", "carbon star", "C", 5),
        ("N0", "carbon star", "C", 0),
        ("C-R3.5", "carbon star", "C", 3.5),
        ("C", "carbon star", "C", NAN),
        ("S5/2", "S star", "S", 5),
        ("S6+/1", "S star", "S", 6),
        ("SC7/8", "S star", "S", 7),
        ("MS", "S star", "S", NAN),
        ("S4,2", "S star", "S", 4),
        ("T5", "ultracool dwarf", "T", 5),
        ("L1", "ultracool dwarf", "L", 1),
        ("L5.5gamma", "ultracool dwarf", "L", 5.5),
        ("Y0", "ultracool dwarf", "Y", 0),
    ],
)
def test_types_outside_the_mk_system(text, kind, letter, subtype):
    mk = MKType.parse(text)
    assert (mk.kind, mk.letter) == (kind, letter)
    assert mk.subtype == pytest.approx(subtype, nan_ok=True)
    assert math.isnan(mk.t_code) and math.isnan(mk.t_code_hi) and math.isnan(mk.lum_code) and math.isnan(mk.lum_code_hi)
    assert str(mk) == text and MKType.parse(str(mk)) == mk


@pytest.mark.parametrize(
    "text,parts",
    [
        ("F5 V + K0 III", ("F5 V", "K0 III")),
        ("K0III+A", ("K0 III", "A")),
        ("WN5+O6V", ("WN5", "O6 V")),
        ("K3Ia+B0", ("K3 Ia", "B0")),
        ("B1Ia+ + O9V", ("B1 Ia0", "O9 V")),
        ("A0V+A0V+F", ("A0 V", "A0 V", "F")),
        ("DA2+dM4", ("DA2", "dM4")),
        ("sdB+F", ("sdB", "F")),
        ("G8III+A2V:", ("G8 III", "A2 V:")),
        ("K2III & A5V", ("K2 III", "A5 V")),
        ("G8V/K0III+A", ("G8 V /K0III", "A")),
    ],
)
def test_composites(text, parts):
    mk = MKType.parse(text)
    assert str(mk) == " + ".join(parts)
    assert tuple(str(c) for c in mk.composite) == parts[1:]
    assert all(not c.composite for c in mk.composite)
    assert MKType.parse(str(mk)) == mk
    alone = MKType.parse(parts[0])
    assert (mk.letter, mk.lum_class, mk.kind) == (alone.letter, alone.lum_class, alone.kind)


@pytest.mark.parametrize(
    "text,uncertain", [("G2 V", False), ("G2: V", True), ("K0 III:", True), ("K0 III?", True), ("G8 (III)", True)]
)
def test_doubt(text, uncertain):
    assert MKType.parse(text).uncertain is uncertain
    assert MKType.parse(text).lum_class in ("V", "III")


NONSENSE = [
    "X9 Z",
    "",
    "   ",
    "\t\n",
    "banana",
    "12345",
    "VV",
    "V",
    "III",
    "G2 Q",
    "Z2 V",
    "H5 III",
    "G12 V",
    "G99",
    "M11 III",
    "G2 VIII",
    "G2 IX",
    "K0 IIII",
    "K0 IVI",
    "G-2 V",
    "Foo",
    "Galaxy",
    "GALAXY",
    "QSO",
    "unknown",
    "STAR",
    "Star",
    "None",
    "nan",
    "null",
    "G2<b>",
    "<script>",
    "((((((((",
    "+",
    "+G2V",
    "Sun",
    "Dwarf",
    "Carbon",
    "WNet",
    "OOOOOOO",
    "Big",
    "Kid",
    "-1",
    "A B C",
    "Cat",
    "Dan",
    "Mars",
    "C3PO",
    "N",
    "DOG",
    "DAD",
    "Steve",
    "K0 hello",
    "G2\x00V",
    "G2\x1b[31m",
    "{G2}",
    "G2|V",
    "2G V",
    "Vega",
    "Barnard",
    "Fe-0.5",
    "HD 1234",
    "5000 K",
    "é",
    "∞",
]


@pytest.mark.parametrize("text", NONSENSE, ids=lambda t: repr(t))
def test_nonsense(text):
    with pytest.raises(RequestError) as caught:
        MKType.parse(text)
    said = str(caught.value)
    assert said.endswith(".") and "\n" not in said and "\x1b" not in said and len(said) < 200


@pytest.mark.parametrize(
    "junk",
    [
        "x" * 10_000,
        "G2 V" * 2500,
        "(" * 10_000,
        "k" * 10_000,
        "A0mA0" * 2000,
        "G2 V" + " " * 10_000 + "e",
        "+G2" * 3300,
    ],
)
def test_long_junk_is_turned_away_at_once(junk):
    start = time.perf_counter()
    with pytest.raises(RequestError, match="too long"):
        MKType.parse(junk)
    assert time.perf_counter() - start < 0.05


@pytest.mark.parametrize(
    "unit",
    [
        "(",
        "((",
        "k",
        "kA0",
        "m",
        "mA0-",
        "G2",
        "G2+",
        "-",
        "/",
        "III",
        "Ia+",
        "CN-",
        "Fe",
        "e",
        ":",
        "?",
        "D",
        "DA",
        "1.",
        "9",
    ],
)
def test_no_text_within_the_limit_takes_long(unit):
    for start in ("", "G2", "A1m", "K0 III", "kA5"):
        text = (start + unit * MAX_LENGTH)[:MAX_LENGTH]
        began = time.perf_counter()
        try:
            mk = MKType.parse(text)
            _ = mk.peculiarities, mk.rest
        except RequestError:
            pass
        assert time.perf_counter() - began < 0.2


def test_wrong_kind_of_argument():
    with pytest.raises(RequestError, match="is text"):
        MKType.parse(42)  # type: ignore[arg-type]


def test_equal_and_hashable():
    assert MKType.parse("G2V") == MKType.parse("G2 V")
    assert len({MKType.parse("G2V"), MKType.parse("G2 V"), MKType.parse("M"), MKType.parse("M")}) == 2


# --- round trip -----------------------------------------------------------------------------------------------------

letters = st.sampled_from("OBAFGKM")
digits = st.sampled_from(["0", "1", "2", "3", "5", "7", "9", "0.5", "1.5", "9.5", "9.7"])
subtypes = st.tuples(letters, digits).map("".join)
marks = st.sampled_from(["", ":", "?"])
temperatures = st.one_of(
    st.tuples(subtypes, marks).map("".join),
    st.tuples(subtypes, st.sampled_from("-/"), subtypes).map("".join),
    st.tuples(st.sampled_from(["sd", "d", "g", "sg", "esd"]), subtypes).map("".join),
    st.tuples(subtypes, subtypes, subtypes).map(lambda t: f"k{t[0]}h{t[1]}m{t[2]}"),
)
classes = st.sampled_from(
    [
        "Ia0",
        "Ia",
        "Iab",
        "Ib",
        "II",
        "III",
        "IV",
        "V",
        "I",
        "VI",
        "IIIa",
        "IIIb",
        "IIIab",
        "Va",
        "Ib-II",
        "III-IV",
        "IV/V",
        "Ia-Iab",
    ]
)
peculiar = st.lists(
    st.sampled_from(
        ["e", "n", "p", "(n)", "((f))", "z", "var", "CN0.5", "Fe-1", "Ba1", "SB", "shell", "(SiCr)", "[e]", "m"]
    ),
    max_size=3,
)


@st.composite
def notations(draw):
    text = draw(temperatures)
    if draw(st.booleans()):
        text += draw(st.sampled_from(["", " "])) + draw(classes) + draw(marks)
    return text + draw(st.sampled_from(["", " "])) + draw(st.sampled_from(["", " "])).join(draw(peculiar))


@settings(deadline=None, max_examples=400)
@given(notations(), st.one_of(st.none(), notations()))
def test_round_trip_of_notation(one, two):
    text = one if two is None else f"{one} + {two}"
    try:
        mk = MKType.parse(text)
    except RequestError:
        return
    again = MKType.parse(str(mk))
    assert again == mk and str(again) == str(mk)


@settings(deadline=None, max_examples=200)
@given(subtypes, classes)
def test_every_plain_type_is_accepted_and_keeps_its_numbers(subtype, lum):
    mk = MKType.parse(f"{subtype} {lum}")
    assert str(mk) == f"{subtype} {lum}" and mk.rest == "" and mk.peculiarities == ()
    assert mk.t_code == 10 * "OBAFGKM".index(subtype[0]) + float(subtype[1:])


@settings(deadline=None, max_examples=600)
@given(st.text(alphabet="OBAFGKMIVWCNSDLTabdeghkmnpsz0123456789.+-/:?()[] *,", max_size=24))
def test_whatever_is_accepted_round_trips(text):
    try:
        mk = MKType.parse(text)
    except RequestError as error:
        assert str(error).endswith(".")
        return
    again = MKType.parse(str(mk))
    assert again == mk and str(again) == str(mk)
    for c in re.sub(r"(?<=\d)\.(?!\d)", "", text.replace(" ", "")):   # a point that no digit follows may go: "G2."
        assert c.lower() in str(mk).lower() or c in "+-0I", (text, str(mk))  # only Ia+ and Ia-0 are spelled anew


@settings(deadline=None, max_examples=300)
@given(st.text(max_size=200))
def test_any_text_parses_or_is_turned_away(text):
    try:
        mk = MKType.parse(text)
    except RequestError as error:
        assert "\n" not in str(error)
        return
    assert MKType.parse(str(mk)) == mk
