"""The slow, general ways in: astropy for rare FITS and VOTable, specutils' loaders as the last resort.

Nothing here is imported on the quick path.
"""

from __future__ import annotations

import io
import warnings
from typing import TYPE_CHECKING, Any

import numpy as np

from starfathom.classify.errors import SpectrumError
from starfathom.classify.reading import fitsio, hints
from starfathom.classify.reading.raw import ErrorKind, RawSpectrum
from starfathom.classify.reading.request import Request
from starfathom.classify.reading.text import Table, assign_columns
from starfathom.classify.spectrum import Medium

if TYPE_CHECKING:
    from specutils import Spectrum

#: Largest VOTable that is parsed, in bytes.
MAX_VOTABLE = 3 << 20
#: Most pixels that are unpacked from a compressed image.
_MAX_UNPACKED = 20_000_000


def plain_fits(data: bytes, path: str) -> bytes:
    """The same FITS file with compressed images and ASCII tables turned into plain images and binary tables.

    Raises SpectrumError when it holds more than a spectrum needs, or cannot be unpacked.
    """
    for hdu in fitsio.hdus(data):
        hdu.need()
        if hdu.kind == "ascii table" and hdu.header.whole("NAXIS2") > fitsio.MAX_CELLS // 5:
            raise SpectrumError(f"{path}: {hdu} has too many rows for one spectrum; extract the spectrum first.")
        sizes = [hdu.header.whole(f"ZNAXIS{i + 1}") for i in range(min(hdu.header.whole("ZNAXIS"), 9))]
        if sizes and int(np.prod(sizes, dtype=object)) > _MAX_UNPACKED:
            raise SpectrumError(
                f"{path}: {hdu} unpacks to too many pixels for one spectrum; extract the spectrum first."
            )
    from astropy.io import fits
    from astropy.table import Table as AstropyTable

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        out: list[Any] = []
        with fits.open(io.BytesIO(data), memmap=False) as units:
            for i, unit in enumerate(units):
                if isinstance(unit, fits.CompImageHDU):
                    new = fits.ImageHDU(unit.data, unit.header)
                elif isinstance(unit, fits.TableHDU):
                    new = fits.table_to_hdu(AstropyTable.read(unit))
                    new.header.extend(unit.header, unique=True, strip=True)
                elif i == 0 and isinstance(unit, fits.GroupsHDU):
                    raise SpectrumError(f"{path}: holds random groups, not a spectrum; save it as an image or table.")
                else:
                    new = unit.copy()
                out.append(new)
            if not isinstance(out[0], fits.PrimaryHDU):
                out.insert(0, fits.PrimaryHDU())
            stream = io.BytesIO()
            fits.HDUList(out).writeto(stream, output_verify="silentfix+ignore")
    return stream.getvalue()


def read_votable(data: bytes, path: str, request: Request) -> RawSpectrum:
    """The first table of a VOTable document that holds a spectrum."""
    if len(data) > MAX_VOTABLE:
        raise SpectrumError(f"{path}: {len(data) >> 20} MB of VOTable is too much for one spectrum; extract it first.")
    if b"<!ENTITY" in data:
        raise SpectrumError(f"{path}: the VOTable defines entities, which is not safe to read; write it without them.")
    from astropy.io.votable import parse

    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        try:
            document = parse(io.BytesIO(data), verify="ignore")
            tables = [t.to_table(use_names_over_ids=True) for t in document.iter_tables()]
        except Exception as error:
            text = " ".join(str(error).split())[:100]
            raise SpectrumError(f"{path}: the VOTable cannot be read ({text}); write it again.") from None
    for table in tables:
        names, units, values = [], [], []
        for name in table.colnames:
            column = table[name]
            if column.dtype.kind not in "iufb" or len(column) == 0:
                continue
            cells = np.ma.filled(np.ma.asarray(column).astype(float), np.nan)
            values.append(cells.ravel() if cells.ndim > 1 and len(cells) == 1 else cells)
            names.append(name)
            units.append("" if column.unit is None else str(column.unit))
        length = max((len(v) for v in values), default=0)
        keep = [i for i, v in enumerate(values) if v.ndim == 1 and len(v) == length]
        if len(keep) >= 2:
            remarks = "\n".join(str(v) for v in [table.meta.get("description", "")])
            found = Table(
                np.column_stack([values[i] for i in keep]), [names[i] for i in keep], [units[i] for i in keep], remarks
            )
            return assign_columns(found, path, request)
    raise SpectrumError(
        f"{path}: the VOTable holds no table with wavelength and flux columns; check what was exported."
    )


def read_with_specutils(name: str, path: str, loader: str) -> RawSpectrum:
    """Whatever specutils' loaders make of a file (``loader`` "" lets them guess)."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        from specutils import Spectrum

        try:
            found = Spectrum.read(name, format=loader) if loader else Spectrum.read(name)
        except Exception as error:
            text = " ".join(str(error).split())[:150] or type(error).__name__
            raise SpectrumError(f"{path}: specutils cannot read it ({text}); check the file or its format.") from None
        return raw_from_specutils(found, path)


def raw_from_specutils(spec: Spectrum, path: str) -> RawSpectrum:
    """Arrays, units and hints out of a ``specutils.Spectrum`` of one dimension (axes of length 1 are dropped)."""
    import astropy.units as u

    flux = np.squeeze(np.asarray(spec.flux.value, float))
    if flux.ndim != 1:
        shape = " x ".join(str(s) for s in np.shape(spec.flux.value))
        raise SpectrumError(f"{path or 'the spectrum'}: holds {shape} values, not one spectrum; pick one row.")
    axis = spec.spectral_axis
    with np.errstate(all="ignore"):
        try:
            wave = np.asarray(axis.to_value(u.AA, u.spectral()), float)
        except u.UnitConversionError:
            raise SpectrumError(
                f"{path or 'the spectrum'}: its spectral axis is in {axis.unit.to_string() or 'no unit'}, "
                "which gives no wavelengths; calibrate it first."
            ) from None
    raw = RawSpectrum(wave, flux, "Angstrom", _flux_word(spec.flux.unit), where="specutils")
    if spec.uncertainty is not None and spec.uncertainty.array is not None:
        kinds: dict[str, ErrorKind] = {"std": "std", "var": "var", "ivar": "ivar"}
        kind = kinds.get(spec.uncertainty.uncertainty_type)
        if kind is not None:
            raw.error, raw.error_kind = np.squeeze(np.asarray(spec.uncertainty.array, float)), kind
    if spec.mask is not None:
        raw.bad = np.broadcast_to(np.squeeze(np.asarray(spec.mask)), flux.shape).astype(bool)
    meta = spec.meta or {}
    own = meta.get("plain")
    if isinstance(own, dict):
        raw.meta.update(own)
    medium = meta.get("medium")
    if medium in ("air", "vacuum"):
        raw.medium, raw.medium_source = _as_medium(medium), str(meta.get("medium_source", "metadata"))
    else:
        raw.medium, raw.medium_source = _medium_of_wcs(spec)
        if axis.unit.physical_type == "frequency" and raw.medium == "unknown":
            raw.medium, raw.medium_source = "vacuum", "computed from frequency"
    header = meta.get("header")
    if header is not None and hasattr(header, "tostring"):
        card_text = header.tostring(sep="", endcard=False, padding=False).encode("ascii", "replace")
        ours = fitsio.Header(card_text)
        if raw.medium == "unknown":
            raw.medium, raw.medium_source = hints.medium_of([ours])
        for key, value in hints.meta_of([ours]).items():
            raw.meta.setdefault(key, value)
    return raw


def _as_medium(word: str) -> Medium:
    return "air" if word == "air" else "vacuum"


def _medium_of_wcs(spec: Spectrum) -> tuple[Medium, str]:
    ctype = getattr(getattr(spec.wcs, "wcs", None), "ctype", None)
    for word in ctype if ctype is not None else ():
        if str(word).startswith("AWAV"):
            return "air", f"CTYPE = {word}"
        if str(word).startswith("WAVE") and len(str(word)) > 3:
            return "vacuum", f"CTYPE = {word}"
    return "unknown", "not stated"


def _flux_word(unit: Any) -> str:
    """A flux unit as a word :func:`units.flux_kind` knows, told by its physical type."""
    kinds = {
        "spectral flux density wav": "erg/s/cm2/A",
        "surface brightness wav": "erg/s/cm2/A",
        "spectral flux density": "Jy",
        "surface brightness": "Jy",
        "photon flux density wav": "photon/s/cm2/A",
        "photon flux density": "photon/s/cm2/Hz",
    }
    for physical in unit.physical_type if unit is not None else ():
        if physical in kinds:
            return kinds[physical]
    return "" if unit is None else unit.to_string()


__all__ = ["plain_fits", "raw_from_specutils", "read_votable", "read_with_specutils"]
