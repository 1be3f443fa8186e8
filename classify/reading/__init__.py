"""Reading any usual one-dimensional spectrum file, by content, not by name."""

from __future__ import annotations

import os
import re
from collections.abc import Mapping
from typing import TYPE_CHECKING

from starfathom.classify.errors import RequestError, SpectrumError, StarfathomError
from starfathom.classify.spectrum import Medium, PlainSpectrum

if TYPE_CHECKING:
    from specutils import Spectrum

    from starfathom.classify.reading.raw import RawSpectrum
    from starfathom.classify.reading.request import Request

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
    read_as : "text", "fits", "votable" or "specutils" (``specutils:NAME`` for one of its loaders); None to tell
        by content; columns may follow, as in ``text,wave=2,flux=3``
    columns : which column is what, as ``{"wave": "LAMBDA", "flux": 3}`` or ``"wave=LAMBDA,flux=3"``; also ``hdu``,
        ``row`` (1-based), ``unit`` (of wavelength, such as nm) and ``flux_unit``

    Returns
    -------
    PlainSpectrum
        wavelengths in angstrom, ascending; flux proportional to f_lambda

    Raises
    ------
    SpectrumError
        when the file cannot be read as a spectrum; the message is one sentence.
    RequestError
        when ``medium``, ``read_as`` or ``columns`` make no sense.
    """
    import numpy as np

    from starfathom.classify.reading import files
    from starfathom.classify.reading.request import request_of

    asked = _medium_of(medium)
    request = request_of(read_as, columns)
    try:
        name = os.fspath(path)
        name = name.decode(errors="surrogateescape") if isinstance(name, bytes) else name
    except TypeError:
        raise RequestError(f"a spectrum is named by its path, not by {type(path).__name__}.") from None
    shown = files.shown(name)
    try:
        with np.errstate(all="ignore"):  # odd numbers in a file are dealt with, not warned of
            return _read(name, shown, asked, request)
    except StarfathomError:
        raise
    except MemoryError:
        raise SpectrumError(f"{shown}: there is not enough memory to read it; extract the spectrum first.") from None
    except Exception as error:
        text = " ".join(str(error).split())[:150] or type(error).__name__
        raise SpectrumError(
            f"{shown}: cannot be read as a spectrum ({text}); check the file or say how to read it."
        ) from error


def _medium_of(medium: str | None) -> Medium | None:
    if medium is None or medium == "unknown":
        return None
    if medium == "air":
        return "air"
    if medium == "vacuum":
        return "vacuum"
    raise RequestError(f"wavelengths are in 'air' or 'vacuum', not {medium!r}.")


def _read(name: str, shown: str, asked: Medium | None, request: Request) -> PlainSpectrum:
    from dataclasses import replace

    from starfathom.classify.reading import files, finish

    given = name
    if request.hdu is None and name.endswith("]") and not os.path.exists(name):
        picked = re.fullmatch(r"(.+)\[([A-Za-z0-9_-]{1,68})\]", name)
        if picked is not None:
            name, request = picked.group(1), replace(request, hdu=picked.group(2))
    data = files.load_bytes(name)
    raw = _raw(data, name, shown, request)
    if request.unit:
        raw.wave_unit = request.unit
    if request.flux_unit:
        raw.flux_unit = request.flux_unit
    if asked is not None:
        raw.medium, raw.medium_source = asked, "asked for"
    return replace(finish.finish(raw, shown), path=given)


def _raw(data: bytes, name: str, shown: str, request: Request) -> RawSpectrum:
    """The format told by content, and its reader."""
    from starfathom.classify.reading import text

    kind = request.kind
    if kind == "specutils":
        from starfathom.classify.reading import general

        return general.read_with_specutils(name, shown, request.loader)
    if data.startswith(b"SIMPLE") and b"\n" not in data[:80] and kind in ("", "fits"):
        return _fits(data, name, shown, request)
    if kind == "fits":
        raise SpectrumError(f"{shown}: is not a FITS file (it does not start with SIMPLE); check what it is.")
    head = data[:2000].lstrip(b"\xef\xbb\xbf \t\r\n")
    if kind == "votable" or (not kind and head.startswith(b"<") and b"<VOTABLE" in data[:4000].upper()):
        from starfathom.classify.reading import general

        return general.read_votable(data, shown, request)
    if not kind:
        _known_others(data, head, shown)
        if data.startswith(b"\x93NUMPY"):
            return text.read_array(data, shown, request)
    return text.read_text(data, shown, request)


#: First bytes of files that are no spectra, and what they are.
_OTHERS: tuple[tuple[bytes, str], ...] = (
    (b"%PDF", "a PDF document"),
    (b"\x89PNG", "a PNG picture"),
    (b"\xff\xd8\xff", "a JPEG picture"),
    (b"GIF8", "a GIF picture"),
    (b"\x89HDF", "an HDF5 file"),
    (b"#ASDF", "an ASDF file"),
    (b"PK\x05\x06", "an empty zip archive"),
    (b"\x7fELF", "a program"),
    (b"{\\rtf", "a word-processor document"),
    (b"\xd0\xcf\x11\xe0", "an office document"),
    (b"SQLite format 3", "a database"),
    (b"PAR1", "a Parquet table"),
    (b"\x1f\x9d", "a file packed with compress"),
    (b"(\xb5/\xfd", "a file packed with zstd"),
    (b"7z\xbc\xaf", "a 7z archive"),
    (b"Rar!", "a RAR archive"),
)


def _known_others(data: bytes, head: bytes, shown: str) -> None:
    for magic, what in _OTHERS:
        if data.startswith(magic):
            raise SpectrumError(f"{shown}: is {what}, not a spectrum; save the spectrum as FITS or text.")
    low = head[:300].lower()
    if low.startswith((b"<!doctype html", b"<html", b"<head", b"<body")):
        raise SpectrumError(f"{shown}: is a web page, not a spectrum; download the data file itself.")
    if len(data) > 262 and data[257:262] == b"ustar":
        raise SpectrumError(f"{shown}: is a tar archive; unpack it and name the spectra.")


def _fits(data: bytes, name: str, shown: str, request: Request) -> RawSpectrum:
    from starfathom.classify.reading import fitsread
    from starfathom.classify.reading.fitsio import FitsBeyond

    try:
        return fitsread.read_fits(data, shown, request)
    except FitsBeyond as beyond:
        from starfathom.classify.reading import general

        try:
            return fitsread.read_fits(general.plain_fits(data, shown), shown, request)
        except FitsBeyond:
            pass
        except SpectrumError:
            raise
        except Exception:
            raise SpectrumError(
                f"{shown}: {beyond} and cannot be unpacked; save it as a plain image or table."
            ) from None
        try:
            return general.read_with_specutils(name, shown, "")
        except SpectrumError:
            raise SpectrumError(f"{shown}: {beyond}; save it as a plain image or table.") from None


def read_spectrum(
    path: str | os.PathLike[str],
    *,
    medium: str | None = None,
    read_as: str | None = None,
    columns: Mapping[str, str | int] | str | None = None,
) -> Spectrum:
    """Like :func:`read_plain`, as a ``specutils.Spectrum`` (flux dimensionless, wavelengths in angstrom)."""
    return read_plain(path, medium=medium, read_as=read_as, columns=columns).to_specutils()


def plain_from_specutils(spec: Spectrum) -> PlainSpectrum:
    """A plain spectrum from a ``specutils.Spectrum``; axes of length 1 are dropped.

    Raises
    ------
    SpectrumError
        when it is not one-dimensional, its axis gives no wavelengths, or it fails the checks of :func:`read_plain`.
    """
    from dataclasses import replace

    from starfathom.classify.reading import finish, general

    meta = spec.meta or {}
    path = str(meta.get("path", ""))
    plain = finish.finish(general.raw_from_specutils(spec, path), path or "the spectrum")
    notes = tuple(dict.fromkeys([*map(str, meta.get("notes", ())), *plain.notes]))
    return replace(plain, path=path, notes=notes)
