"""Reading any usual one-dimensional spectrum file, by content, not by name."""

from __future__ import annotations

import os
from collections.abc import Mapping
from typing import TYPE_CHECKING

from starfathom.classify.errors import RequestError, SpectrumError, StarfathomError
from starfathom.classify.spectrum import Medium, PlainSpectrum

if TYPE_CHECKING:
    from specutils import Spectrum

__all__ = ["plain_from_specutils", "read_plain", "read_spectrum"]


def read_plain(
    path: str | os.PathLike[str],
    *,
    medium: str | None = None,
    read_as: str | None = None,
    columns: Mapping[str, str | int] | str | None = None,
) -> PlainSpectrum:
    """Read one spectrum file.

    Parameters
    ----------
    path : the file; ``name.fits[2]`` or ``name.fits[SCI]`` picks an HDU
    medium : "air" or "vacuum" to overrule the header, None to believe it
    read_as : "text", "fits", "votable" or "specutils" (``specutils:NAME`` for one of its loaders); None to tell by content
    columns : which column is what, as ``{"wave": "LAMBDA", "flux": 3}`` or ``"wave=LAMBDA,flux=3"``; also ``hdu``,
        ``row`` (1-based), ``unit`` (of wavelength, such as nm) and ``flux_unit``

    Raises
    ------
    SpectrumError
        when the file cannot be read as a spectrum; the message is one sentence.
    RequestError
        when ``medium``, ``read_as`` or ``columns`` make no sense.
    """
    from starfathom.classify.reading import files
    from starfathom.classify.reading.request import request_of

    asked = _medium_of(medium)
    request = request_of(read_as, columns)
    shown = files.shown(path)
    try:
        return _read(os.fspath(path), shown, asked, request)
    except StarfathomError:
        raise
    except MemoryError:
        raise SpectrumError(f"{shown}: there is not enough memory to read it; extract the spectrum first.") from None
    except Exception as error:
        text = " ".join(str(error).split())[:150] or type(error).__name__
        raise SpectrumError(f"{shown}: cannot be read as a spectrum ({text}); check the file or say how to read it.") from error


def _medium_of(medium: str | None) -> Medium | None:
    if medium is None or medium == "unknown":
        return None
    if medium in ("air", "vacuum"):
        return medium  # type: ignore[return-value]
    raise RequestError(f"wavelengths are in 'air' or 'vacuum', not {medium!r}.")


def _read(path: str, shown: str, asked: Medium | None, request: object) -> PlainSpectrum:
    from dataclasses import replace

    from starfathom.classify.reading import files, finish, fitsio, fitsread, text
    from starfathom.classify.reading.request import Request

    assert isinstance(request, Request)
    path, request = _hdu_in_name(path, request)
    data = files.load_bytes(path)
    kind = request.kind
    if kind in ("", "fits") and data.startswith(b"SIMPLE"):
        try:
            raw = fitsread.read_fits(data, shown, request)
        except fitsio.FitsBeyond as error:
            raise SpectrumError(f"{shown}: {error}; convert it to a plain image or table.") from None
    else:
        raw = text.read_text(data, shown, request)
    if request.unit:
        raw.wave_unit = request.unit
    if request.flux_unit:
        raw.flux_unit = request.flux_unit
    if asked is not None:
        raw.medium, raw.medium_source = asked, "asked for"
    spectrum = finish.finish(raw, shown)
    return replace(spectrum, path=path)


def _hdu_in_name(path: str, request: object) -> tuple[str, object]:
    return path, request


def read_spectrum(
    path: str | os.PathLike[str],
    *,
    medium: str | None = None,
    read_as: str | None = None,
    columns: Mapping[str, str | int] | str | None = None,
) -> Spectrum:
    """Like :func:`read_plain`, as a ``specutils.Spectrum``."""
    return read_plain(path, medium=medium, read_as=read_as, columns=columns).to_specutils()


def plain_from_specutils(spec: Spectrum) -> PlainSpectrum:
    """A plain spectrum from a ``specutils.Spectrum`` of one dimension."""
    raise NotImplementedError
