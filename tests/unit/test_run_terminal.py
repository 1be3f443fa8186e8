"""The blocks on the terminal: every width, no colour codes where there is no terminal, sensible figures."""

from __future__ import annotations

import math
import re

import pytest

from starfathom import terminal

ROW = {
    "name": "TH17-10",
    "status": "typed",
    "object_kind": "star",
    "mk_type": "G8 III",
    "t_code": 47.9,
    "t_code_err": 0.62,
    "p_V": 0.02,
    "p_III": 0.875,
    "p_IV": 0.1,
    "p_II": 0.005,
    "snr": 131.2,
    "snr_window": "4400-4600",
    "fwhm_angstrom": 6.04,
    "velocity_kms": -3.4,
    "velocity_err_kms": 4.1,
    "wave_medium": "air (assumed)",
    "nearest": "HD1,HD2,HD3",
    "remark": "G band strong, CN 4216 enhanced, Sr II 4077 against Fe I as in giants; and so on, at some length",
    "flags": "metal-weak",
    "abs_mag_v": 0.41,
    "abs_mag_v_err": 0.38,
    "abs_mag_v_ok": True,
    "ebv": 0.121,
    "ebv_err": 0.031,
    "a_v": 0.38,
    "a_v_err": 0.1,
    "distance_pc": 531.2,
    "distance_lo_pc": 430.1,
    "distance_hi_pc": 655.0,
    "distance_lo95_pc": 340.0,
    "distance_hi95_pc": 800.0,
    "teff_k": 4987.0,
    "teff_k_err": 113.0,
    "log_lum_lsun": 1.72,
    "log_lum_lsun_err": 0.17,
    "radius_rsun": 9.8,
    "radius_rsun_err": 1.9,
    "parallax_sigma": 2.4,
    "cautions": "One colour cannot tell dust from a cool star.",
}
BUDGET = [{"step": "scale scatter", "per_cent": 18.2}, {"step": "class", "per_cent": 6.1},
          {"step": "R_V", "per_cent": 0.2}, {"step": "total", "per_cent": 20.0}]  # fmt: skip


@pytest.mark.parametrize("width", (50, 80, 110))
def test_no_line_is_wider_than_asked(width: int) -> None:
    block = terminal.star_block(ROW, BUDGET, width=width)
    assert max(map(len, block.splitlines())) <= width
    assert "\x1b" not in block


def test_says_what_matters() -> None:
    block = terminal.star_block(ROW, BUDGET, width=110)
    for words in (
        "G8 III", "very likely III (88 %), possibly IV (10 %)", "subtype ± 0.62", "530 pc", "68 % 430 to 660 pc",
        "95 % 340 to 800 pc", "log L +1.72 ± 0.17", "R 9.8 ± 1.9 Rsun", "Teff 4990 ± 110 K",
        "E(B-V) 0.121 ± 0.031", "A_V 0.38", "scale scatter 18 %, class 6 %",
        "in tension (+2.4 sigma)", "One colour cannot",
    ):  # fmt: skip
        assert words in block


def test_colour_only_adds() -> None:
    plain = terminal.star_block(ROW, BUDGET, width=80)
    colour = terminal.star_block(ROW, BUDGET, width=80, colour=True)
    assert re.sub(r"\x1b\[[0-9;]*m", "", colour) == plain and colour != plain


def test_refused_and_failed_say_why() -> None:
    refused = {"file": "g.fits", "status": "refused", "object_kind": "galaxy", "reason": "Lines of a galaxy.",
               "distance_pc": math.nan}  # fmt: skip
    assert terminal.star_block(refused).splitlines() == [
        "g.fits   not typed: galaxy",
        "  because   Lines of a galaxy.",
    ]
    failed = {"file": "x.fits", "status": "failed", "object_kind": "unknown", "reason": "It is empty."}
    assert terminal.star_block(failed).splitlines()[0] == "x.fits   failed"
    assert "failed: It is empty." in terminal.one_line(failed, width=80)


def test_one_line_fits() -> None:
    for width in (50, 80, 110):
        assert len(terminal.one_line(ROW | {"name": "x" * 200}, width=width)) <= width + 6


@pytest.mark.parametrize(("value", "error", "text"), [
    (531.2, 112.0, "530"), (0.1213, 0.031, "0.121"), (5780.0, 90.0, "5780"), (1.0, 0.011, "1.000"), (0.0, None, "0"),
    (12345.0, None, "12300"), (math.nan, 1.0, "?"),
])  # fmt: skip
def test_figures_follow_the_error(value: float, error: float | None, text: str) -> None:
    assert terminal.significant(value, error) == text


@pytest.mark.parametrize(
    ("p", "text"), [(0.9999, "over 99.9 %"), (0.993, "99.3 %"), (0.5, "50 %"), (0.002, "under 1 %")]
)
def test_probabilities_are_never_rounded_to_certainty(p: float, text: str) -> None:
    assert terminal.per_cent(p) == text


def test_far_stars_are_told_in_kiloparsecs() -> None:
    assert terminal.distance_text(23456.0, 3000.0) == "23.5 kpc"


def test_no_colour_without_a_terminal(monkeypatch: pytest.MonkeyPatch) -> None:
    assert not terminal.colour_wanted()

    class Screen:
        def isatty(self) -> bool:
            return True

    monkeypatch.setenv("TERM", "xterm")
    monkeypatch.delenv("NO_COLOR", raising=False)
    assert terminal.colour_wanted(Screen())  # type: ignore[arg-type]
    monkeypatch.setenv("NO_COLOR", "1")
    assert not terminal.colour_wanted(Screen())  # type: ignore[arg-type]


def test_summary_counts() -> None:
    assert terminal.summary({"rows": 1, "refused": 0, "failed": 0}) == "1 star: 1 typed."
    assert terminal.summary({"rows": 9, "refused": 2, "failed": 1}).startswith("9 stars: 6 typed, 2 refused")


def test_a_caution_that_most_share_is_said_once() -> None:
    common = "Common to all; with a semicolon."
    rows = [ROW | {"cautions": f"{common} Own one."}] + [ROW | {"cautions": common}] * 4
    said = terminal.common_cautions(rows)
    assert said == ("Common to all; with a semicolon.",)
    assert "Own one." in terminal.star_block(rows[0], said=said)
    assert "careful" not in terminal.star_block(rows[1], said=said)


def test_a_number_and_its_unit_stay_together() -> None:
    for width in range(50, 80):
        for line in terminal.star_block(ROW, BUDGET, width=width).splitlines():
            assert not line.lstrip().startswith(("%", "pc", "Å", "K ", "km/s"))


def test_a_name_cannot_steer_the_terminal() -> None:
    row = ROW | {"name": "\x1b[2Jgone\x07", "remark": "a\x9bb"}
    for text in (terminal.star_block(row), terminal.one_line(row)):
        assert not set("\x1b\x07\x9b") & set(text) and "gone" in text
