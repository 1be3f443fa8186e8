"""Getting at the bytes of a file without being hurt by it: sizes, devices, compression."""

from __future__ import annotations

import bz2
import io
import lzma
import os
import stat
import zipfile
import zlib
from collections.abc import Callable, Iterator

from starfathom.classify.errors import SpectrumError

#: Largest file, and largest content of a compressed file, that is read as one spectrum.
MAX_BYTES = 192 * 1024 * 1024
_CHUNK = 1 << 20

GZIP, BZIP2, XZ, ZIP = b"\x1f\x8b", b"BZh", b"\xfd7zXZ\x00", b"PK\x03\x04"


def load_bytes(path: str | os.PathLike[str]) -> bytes:
    """Content of ``path``, decompressed if it is gzip, bzip2, xz or a zip of one member.

    Raises
    ------
    SpectrumError
        when there is no such file, it cannot be read, is not a regular file, is empty, is larger than
        :data:`MAX_BYTES` (or would unpack to more), or its compression is damaged.
    """
    name = os.fspath(path)
    said = shown(path)
    try:
        status = os.stat(name)
    except FileNotFoundError:
        raise SpectrumError(f"{said}: there is no such file; check the path.") from None
    except (OSError, ValueError) as error:
        raise SpectrumError(f"{said}: cannot be looked at ({_why(error)}); check the path.") from None
    if stat.S_ISDIR(status.st_mode):
        raise SpectrumError(f"{said}: is a folder, not a spectrum; name the files in it.")
    if not stat.S_ISREG(status.st_mode):
        raise SpectrumError(f"{said}: is a device, pipe or socket, not a file; save the spectrum to a file first.")
    if status.st_size > MAX_BYTES:
        raise SpectrumError(
            f"{said}: {status.st_size / 2**20:.0f} MB is too large for one spectrum (limit {MAX_BYTES >> 20} MB); "
            "extract the spectrum to a file of its own."
        )
    try:
        with open(name, "rb", buffering=0) as stream:
            data = stream.read(MAX_BYTES + 1) or b""
            while len(data) < status.st_size:  # a raw read may stop short
                more = stream.read(status.st_size - len(data))
                if not more:
                    break
                data += more
    except PermissionError:
        raise SpectrumError(f"{said}: no permission to read it; change its mode or copy it.") from None
    except OSError as error:
        raise SpectrumError(
            f"{said}: cannot be read ({_why(error)}); check the disk and copy the file again."
        ) from None
    for _ in range(2):  # a gzip inside a gzip happens; deeper nesting does not
        unpacked = unpack(data, said)
        if unpacked is data:
            break
        data = unpacked
    if not data.strip(b"\x00 \t\r\n"):
        what = "is empty" if not data else "holds nothing but blanks or zeros"
        raise SpectrumError(f"{said}: the file {what}; get it again from its source.")
    return data


def _why(error: Exception) -> str:
    if isinstance(error, OSError) and error.errno is not None:
        return os.strerror(error.errno).lower()
    return str(error).lower()


def unpack(data: bytes, name: str) -> bytes:
    """``data`` decompressed, or ``data`` itself when it is not compressed."""
    try:
        if data.startswith(GZIP):
            return _pour(_gzip_pieces(data), name)
        if data.startswith(BZIP2) and data[4:10] == b"1AY&SY":
            return _pour(_pieces(bz2.BZ2Decompressor(), data), name)
        if data.startswith(XZ):
            return _pour(_pieces(lzma.LZMADecompressor(memlimit=256 << 20), data), name)
        if data.startswith(ZIP):
            return _unzip(data, name)
    except (zlib.error, OSError, EOFError, lzma.LZMAError, zipfile.BadZipFile, NotImplementedError, RuntimeError):
        raise SpectrumError(
            f"{name}: the compressed data are damaged or cut off; get the file again from its source."
        ) from None
    return data


def _pour(pieces: Iterator[bytes], name: str) -> bytes:
    out = io.BytesIO()
    for piece in pieces:
        out.write(piece)
        if out.tell() > MAX_BYTES:
            raise SpectrumError(
                f"{name}: unpacks to more than {MAX_BYTES >> 20} MB, too large for one spectrum; "
                "extract the spectrum to a file of its own."
            )
    return out.getvalue()


def _gzip_pieces(data: bytes) -> Iterator[bytes]:
    rest = data
    while rest.startswith(GZIP):
        engine = zlib.decompressobj(wbits=31)
        piece = engine.decompress(rest, _CHUNK)
        while True:
            yield piece
            if engine.eof:
                break
            tail = engine.unconsumed_tail
            piece = engine.decompress(tail, _CHUNK)
            if not piece and not engine.eof and len(engine.unconsumed_tail) == len(tail):
                raise EOFError
        rest = engine.unused_data.lstrip(b"\x00")


def _pieces(engine: bz2.BZ2Decompressor | lzma.LZMADecompressor, data: bytes) -> Iterator[bytes]:
    piece = engine.decompress(data, _CHUNK)
    while True:
        yield piece
        if engine.eof:
            return
        if engine.needs_input:
            raise EOFError
        piece = engine.decompress(b"", _CHUNK)


def _unzip(data: bytes, name: str) -> bytes:
    with zipfile.ZipFile(io.BytesIO(data)) as archive:
        members = [m for m in archive.infolist() if not m.is_dir()]
        if len(members) != 1:
            raise SpectrumError(f"{name}: a zip archive of {len(members)} files; unpack it and name the spectra.")
        with archive.open(members[0]) as stream:
            read: Callable[[], bytes] = lambda: stream.read(_CHUNK)  # noqa: E731
            return _pour(iter(read, b""), name)


def shown(path: str | os.PathLike[str]) -> str:
    """The path as messages show it: as given, control characters and all but its last 200 characters left out."""
    text = "".join(c if c.isprintable() else "?" for c in os.fspath(path))
    return text if len(text) <= 200 else "..." + text[-197:]


__all__ = ["MAX_BYTES", "load_bytes", "shown", "unpack"]
