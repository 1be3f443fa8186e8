"""The table of features: what it must hold, and that it holds together."""

from __future__ import annotations

import re
from pathlib import Path

import numpy as np
import pytest

import starfathom.classify.lines as lines_package
from starfathom.classify.errors import RequestError
from starfathom.classify.lines import FEATURES, TELLURIC, Feature

REQUIRED = """
Halpha Hbeta Hgamma Hdelta CaII_H_Heps H8 H9 H10 CaII_K CaII_8498 CaII_8542 CaII_8662
HeI_4009 HeI_4026 HeI_4121 HeI_4144 HeI_4388 HeI_4471 HeI_4713 HeI_4922 HeI_5876 HeI_6678
HeII_4200 HeII_4541 HeII_4686 HeII_5411 CII_4267 CIII_4650 NII_3995 NIII_4640 NIV_4058
SiII_4128 SiIII_4552 SiIV_4089 SiIV_4116 MgII_4481 CaI_4227 Gband CN_3883 CN_4216
FeI_4046 FeI_4064 FeI_4144 FeI_4271 FeI_4325 FeI_4383 Fe5270 Fe5335 FeII_4233 TiII_4172 CrI_4254 CrI_4274
MnI_4030 SrII_4077 SrII_4216 YII_4376 BaII_4554 Mgb MgH_4780 MgH_5180 NaD OI_7774
C2_4737 C2_5165 C2_5636 CaH1 CaH2 CaH3 TiO_4955 TiO1 TiO2 TiO5 VO_7434 DIB_4430 DIB_5780
""".split()

#: Rest wavelengths in air from the NIST Atomic Spectra Database as printed in Astrophysical Quantities (Allen 1973)
#: and in the lists of Moore (1945), to the digits given there: a check on typing slips in the table.
KNOWN = {"Halpha": 6562.8, "Hbeta": 4861.3, "Hgamma": 4340.5, "Hdelta": 4101.7, "H8": 3889.05, "H9": 3835.4,
         "H10": 3797.9, "CaII_K": 3933.7, "HeI_4471": 4471.5, "HeI_5876": 5875.6, "HeII_4686": 4685.7,
         "HeII_4541": 4541.6, "SiIV_4089": 4088.9, "SrII_4077": 4077.7, "CaI_4227": 4226.7, "BaII_4554": 4554.0,
         "CaII_8542": 8542.1}


def test_every_named_feature_is_there() -> None:
    assert not [name for name in REQUIRED if name not in FEATURES.names]
    assert len(FEATURES) >= 55


@pytest.mark.parametrize("name", KNOWN)
def test_wavelengths(name: str) -> None:
    assert FEATURES[name].wavelength == pytest.approx(KNOWN[name], abs=0.06)


def test_every_row_says_what_it_is_for_and_where_it_comes_from() -> None:
    for feature in FEATURES:
        assert feature.tells and feature.types and feature.citation, feature.name
        assert feature.kind in ("line", "blend", "band"), feature.name
        assert 2.0 <= feature.coarsest_fwhm <= 15.0, feature.name
        assert len(feature.components) >= 2 if feature.kind == "blend" else not feature.components, feature.name
    assert {f.kind for f in TELLURIC} == {"mask"}


def test_windows_and_side_bands_do_not_overlap() -> None:
    for feature in FEATURES:
        if feature.kind == "band":
            continue
        assert feature.window[0] < feature.wavelength < feature.window[1], feature.name
        assert feature.blue is not None and feature.blue[1] <= feature.window[0], feature.name
        assert feature.red is not None and feature.red[0] >= feature.window[1], feature.name
        for _, rest in feature.components:
            assert feature.window[0] < rest < feature.window[1], feature.name


def test_blends_part_at_their_own_components() -> None:
    for feature in FEATURES:
        for label, rest in feature.components:
            shown = re.findall(r"\d{4}", label)
            assert not shown or abs(float(shown[0]) - rest) < 1.0, (label, rest)


def test_astropy_reads_the_same_table() -> None:
    from astropy.table import Table

    table = Table.read(Path(lines_package.__file__).parent / "data" / "features.ecsv")
    assert list(table["feature"]) == [*FEATURES.names, *TELLURIC.names]
    assert str(table["wavelength"].unit) == "Angstrom"
    assert np.allclose(table["wavelength"][: len(FEATURES)], [f.wavelength for f in FEATURES])


def test_a_wrong_feature_is_refused_in_words() -> None:
    with pytest.raises(RequestError, match="side band"):
        Feature("x", "x", 5000.0, (4990.0, 5010.0), None, None)
    with pytest.raises(RequestError, match="lower to a higher"):
        Feature("x", "x", 5000.0, (5010.0, 4990.0), (4900.0, 4910.0), None)
    with pytest.raises(RequestError, match="no feature is called"):
        FEATURES["Hzeta"]
