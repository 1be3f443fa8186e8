"""From a spectrum to an MK type: reading, preparing, measuring, matching, assigning.

    from starfathom.classify import read_spectrum, measure_lines, classify
    assignment = classify(read_spectrum("star.fits"))

Names are imported on first use, so that importing the package costs nothing.
"""

from __future__ import annotations

from importlib import import_module
from typing import Any

_WHERE = {
    "read_spectrum": "reading", "read_plain": "reading", "plain_from_specutils": "reading",
    "measure_lines": "lines", "LineTable": "lines",
    "Assignment": "assignment", "Criterion": "assignment",
    "MKType": "mktype", "PlainSpectrum": "spectrum", "Prepared": "prepared",
    "Classifier": "engine", "Settings": "engine",
    "StarfathomError": "errors", "SpectrumError": "errors", "RequestError": "errors",
}
__all__ = sorted([*_WHERE, "classify"])


def classify(spectrum: Any, settings: Any = None, *, without_libraries: tuple[str, ...] = (),
             without_stars: tuple[int, ...] = ()) -> Any:
    """Type one spectrum: a ``specutils.Spectrum``, a ``PlainSpectrum`` or a path; returns an ``Assignment``.

    ``settings`` (a ``Settings``) states the medium, line spread or velocity when they are known. Raises SpectrumError
    when a path cannot be read; what is wrong within a spectrum is told by the assignment's ``status`` and ``reason``.
    """
    from starfathom.classify.engine import Classifier
    from starfathom.classify.reading import plain_from_specutils, read_plain
    from starfathom.classify.spectrum import PlainSpectrum

    if not isinstance(spectrum, PlainSpectrum):
        spectrum = plain_from_specutils(spectrum) if hasattr(spectrum, "spectral_axis") else read_plain(spectrum)
    return Classifier.load(without_libraries, without_stars).classify_one(spectrum, settings)


def __getattr__(name: str) -> Any:
    if name in _WHERE:
        return getattr(import_module(f"starfathom.classify.{_WHERE[name]}"), name)
    raise AttributeError(f"module {__name__!r} has no attribute {name!r}")


def __dir__() -> list[str]:
    return __all__
