"""FITS files as header dictionaries and planes read in slabs, with little memory.

Headers are scanned here rather than opened by astropy: a truncated or damaged file then fails at once with a
plain error, gzip needs one pass, and planes go straight into their final arrays. Tables and compressed images
use astropy.
"""

from __future__ import annotations

import gzip
import warnings
import zlib
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path
from typing import IO, Any, cast

import numpy as np
from numpy.typing import NDArray

from xcorr.errors import InputError

BLOCK = 2880
_CARD = 80
_MAX_HEADER_BLOCKS = 4000
_SLAB_BYTES = 1 << 21
_DTYPES = {8: ">u1", 16: ">i2", 32: ">i4", 64: ">i8", -32: ">f4", -64: ">f8"}
# what astropy and the standard library raise on damaged bytes
FITS_FAULTS = (OSError, ValueError, TypeError, KeyError, IndexError, EOFError, zlib.error, OverflowError)


@dataclass(frozen=True)
class Hdu:
    """One header-data unit.

    Attributes
    ----------
    index : int
        0 = primary.
    name : str
        EXTNAME, upper case.
    cards : dict
        Keyword -> value; commentary and unreadable cards left out, first of repeated ones kept.
    kind : str
        "image", "compressed", "table" or "other".
    naxis : tuple of int
        NAXIS1, NAXIS2, ... of the image.
    offset : int
        Byte of the first datum (in the uncompressed stream).
    """

    index: int
    name: str
    cards: dict[str, Any]
    kind: str
    naxis: tuple[int, ...]
    offset: int

    @property
    def shape(self) -> tuple[int, ...]:
        """Numpy order."""
        return self.naxis[::-1]

    @property
    def label(self) -> str:
        """For messages: number and name."""
        return f"{self.index} ({self.name})" if self.name else str(self.index)


class FitsFile:
    """A scanned FITS file, plain or gzipped.

    Parameters
    ----------
    path : Path

    Raises
    ------
    InputError
        No FITS file, truncated, or damaged headers.
    """

    def __init__(self, path: Path) -> None:
        self.path = path
        with open(path, "rb") as stream:
            self._gzipped = stream.read(2) == b"\x1f\x8b"
        try:
            with self.open() as stream:
                self.hdus = tuple(_scan(stream, path))
        except (OSError, EOFError, zlib.error) as error:
            raise InputError(
                "FITS file cannot be read", f"{path.name}: {error}", "check or copy it again"
            ) from error

    def open(self) -> IO[bytes]:
        """The byte stream, uncompressed."""
        return cast(IO[bytes], gzip.open(self.path, "rb")) if self._gzipped else open(self.path, "rb")

    def find(self, which: int | str, role: str) -> Hdu:
        """The HDU of a number or an EXTNAME (case ignored)."""
        if isinstance(which, int):
            if which < len(self.hdus):
                return self.hdus[which]
        else:
            for hdu in self.hdus:
                if hdu.name == which.strip().upper():
                    return hdu
        names = ", ".join(hdu.label for hdu in self.hdus[:12])
        raise InputError(f"{role}_extension is not in {self.path.name}", repr(which), f"it holds {names}")

    def slabs(
        self, hdu: Hdu, shape: tuple[int, ...], first: int = 0, last: int | None = None
    ) -> Iterator[tuple[int, NDArray[Any]]]:
        """Successive slabs (start, native array) along the first axis of `shape`, BSCALE and BLANK applied.

        `shape` is that of the image, in numpy order, with or without its axes of length one. Integer planes
        without scaling stay integers. Only one slab is in memory, except for compressed images.
        """
        last = shape[0] if last is None else last
        if hdu.kind == "compressed":
            data = self._by_astropy(hdu).reshape(shape)
            yield first, data[first:last]
            return
        dtype = np.dtype(_DTYPES[int(hdu.cards["BITPIX"])])
        row_items = int(np.prod(shape[1:], dtype=np.int64))
        rows = max(1, _SLAB_BYTES // max(1, row_items * dtype.itemsize))
        try:
            with self.open() as stream:
                stream.seek(hdu.offset + first * row_items * dtype.itemsize)
                for start in range(first, last, rows):
                    n = min(rows, last - start)
                    buffer = np.empty((n, *shape[1:]), dtype)
                    _read_fully(stream, buffer, self.path.name)
                    yield start, _scaled(buffer, hdu)
        except (OSError, EOFError, zlib.error) as error:
            raise InputError(
                "FITS data cannot be read", f"{self.path.name}: {error}", "copy it again"
            ) from error
        except MemoryError as error:
            raise InputError("FITS plane too large", f"{hdu.label}: {shape}", "check NAXISn") from error

    def image(self, hdu: Hdu) -> NDArray[Any]:
        """A whole (small) image."""
        return np.concatenate([part for _, part in self.slabs(hdu, hdu.shape)])

    def table(self, hdu: Hdu) -> Any:
        """A table HDU as an astropy FITS_rec (a copy in memory), with its header scanned by astropy."""
        from astropy.io import fits

        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                with fits.open(self.path, memmap=False) as opened:
                    return fits.FITS_rec.copy(opened[hdu.index].data)
        except (*FITS_FAULTS, fits.VerifyError, AttributeError) as error:
            raise InputError(
                f"table {hdu.label} cannot be read", _first_line(error), "check the file"
            ) from error

    def table_column(self, extension: str, version: int, column: str) -> tuple[NDArray[np.float64], str]:
        """(values as a flat float64 array, unit) of one column of a named table, for -TAB axes."""
        for hdu in self.hdus:
            named = hdu.name == extension.strip().upper()
            if named and hdu.kind == "table" and hdu.cards.get("EXTVER", 1) == version:
                data = self.table(hdu)
                names = {name.lower(): name for name in data.names or ()}
                if column.strip().lower() not in names:
                    break
                key = names[column.strip().lower()]
                return np.asarray(data[key], dtype=np.float64).ravel(), str(data.columns[key].unit or "")
        raise InputError(
            "coordinate table of the -TAB axis missing", f"{extension}[{column}]", "mend the file"
        )

    def _by_astropy(self, hdu: Hdu) -> NDArray[Any]:
        from astropy.io import fits

        try:
            with warnings.catch_warnings():
                warnings.simplefilter("ignore")
                with fits.open(self.path, memmap=False) as opened:
                    data = opened[hdu.index].data
                    if data is None:
                        raise InputError(f"extension {hdu.label} holds no data", "no array", "name another")
                    return np.ascontiguousarray(data, dtype=data.dtype.newbyteorder("="))
        except (*FITS_FAULTS, fits.VerifyError, AttributeError) as error:
            raise InputError(
                f"extension {hdu.label} cannot be read", _first_line(error), "check it"
            ) from error


def _first_line(error: BaseException) -> str:
    text = str(error).strip()
    return f"{type(error).__name__}: {text.splitlines()[0][:100]}" if text else type(error).__name__


def _read_fully(stream: IO[bytes], buffer: NDArray[Any], name: str) -> None:
    view = memoryview(buffer).cast("B")  # type: ignore[arg-type]
    done = 0
    while done < len(view):
        n = stream.readinto(view[done:])  # type: ignore[attr-defined]
        if not n:
            raise InputError("FITS file is truncated", f"{name} ends inside its data", "copy it again")
        done += n


def _scaled(buffer: NDArray[Any], hdu: Hdu) -> NDArray[Any]:
    """Native byte order in place; BSCALE, BZERO and BLANK applied where present."""
    native: NDArray[Any] = buffer
    if buffer.dtype.byteorder == ">":  # never so on a big-endian machine, where ">" is native
        native = buffer.byteswap(inplace=True).view(buffer.dtype.newbyteorder("="))
    scale, zero = hdu.cards.get("BSCALE", 1), hdu.cards.get("BZERO", 0)
    if not isinstance(scale, int | float) or not isinstance(zero, int | float):
        raise InputError("BSCALE and BZERO must be numbers", f"{scale!r}, {zero!r}"[:40], "mend the header")
    blank = hdu.cards.get("BLANK")
    integer = np.issubdtype(native.dtype, np.integer)
    empty = native == blank if integer and isinstance(blank, int) else None
    if integer and scale == 1 and zero == int(zero) and empty is None:
        # unsigned planes are stored with BZERO = 2^(n-1)
        if zero == 0:
            return native
        if abs(zero) < 2**62:
            return native.astype(np.int64) + int(zero)
        return native.view(np.uint64) ^ np.uint64(2**63)
    if scale != 1 or zero != 0 or empty is not None:
        native = native.astype(np.float64) * scale + zero
        if empty is not None:
            native[empty] = np.nan
    return native


def _scan(stream: IO[bytes], path: Path) -> Iterator[Hdu]:
    offset = index = 0
    while True:
        header = _header_bytes(stream, path, index)
        if header is None:
            return
        cards = _cards(header)
        offset += len(header)
        hdu, size = _hdu(index, cards, offset, path)
        yield hdu
        padded = -(-size // BLOCK) * BLOCK
        reached = stream.seek(offset + size)
        if size and (reached < offset + size or not _has_byte_before(stream, offset + size)):
            raise InputError(
                "FITS file is truncated",
                f"{path.name}: data of extension {hdu.label} incomplete",
                "copy it again",
            )
        offset += padded
        stream.seek(offset)
        index += 1


def _has_byte_before(stream: IO[bytes], position: int) -> bool:
    """Whether the byte just before `position` exists (plain files seek past their end silently)."""
    if isinstance(stream, gzip.GzipFile):
        return True
    stream.seek(position - 1)
    return len(stream.read(1)) == 1


def _header_bytes(stream: IO[bytes], path: Path, index: int) -> bytes | None:
    """Header blocks up to END; None at the end of the file (or at trailing filler)."""
    blocks: list[bytes] = []
    while len(blocks) < _MAX_HEADER_BLOCKS:
        block = stream.read(BLOCK)
        if not blocks:
            start = b"SIMPLE  =" if index == 0 else b"XTENSION="
            if not block.startswith(start):
                if index == 0:
                    raise InputError(
                        "not a FITS file", f"{path.name} starts with {block[:9]!r}", "check the file"
                    )
                return None
        if len(block) < BLOCK:
            break
        blocks.append(block)
        if any(block[i : i + _CARD].rstrip() == b"END" for i in range(0, BLOCK, _CARD)):
            return b"".join(blocks)
    raise InputError("FITS file is truncated", f"{path.name}: header {index} has no END", "copy it again")


def _cards(header: bytes) -> dict[str, Any]:
    """Keyword -> value of all readable cards."""
    from astropy.io import fits

    text = header.decode("latin-1")
    found: dict[str, Any] = {}
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        for card in fits.Header.fromstring(text).cards:
            try:
                keyword, value = card.keyword.strip().upper(), card.value
            except (*FITS_FAULTS, fits.VerifyError, AttributeError):
                continue
            if keyword in ("", "COMMENT", "HISTORY", "END") or isinstance(value, fits.card.Undefined):
                continue
            found.setdefault(keyword, value.strip() if isinstance(value, str) else value)
    return found


def _hdu(index: int, cards: dict[str, Any], offset: int, path: Path) -> tuple[Hdu, int]:
    """(HDU, bytes of its data without padding), the sizes checked."""

    def whole(key: str, default: int | None = None) -> int:
        value = cards.get(key, default)
        if isinstance(value, bool) or not isinstance(value, int) or (key != "BITPIX" and value < 0):
            raise InputError(
                f"FITS header {index}: {key} is no whole number", repr(value)[:40], "mend the header"
            )
        return value

    bitpix = whole("BITPIX")
    if bitpix not in _DTYPES:
        raise InputError(f"FITS header {index}: unknown BITPIX", str(bitpix), "mend the header")
    naxis = tuple(whole(f"NAXIS{i}") for i in range(1, min(whole("NAXIS"), 999) + 1))
    items = 1 if naxis else 0
    for n in naxis:
        items *= n
    size = abs(bitpix) // 8 * whole("GCOUNT", 1) * (whole("PCOUNT", 0) + items)
    if cards.get("GROUPS") is True:
        raise InputError("random-groups FITS files are not supported", path.name, "convert to an image")
    extension = cards.get("XTENSION", "IMAGE") if index else "IMAGE"
    kind = {"IMAGE": "image", "BINTABLE": "table", "TABLE": "table"}.get(str(extension), "other")
    if kind == "table" and cards.get("ZIMAGE") is True:
        kind = "compressed"
        naxis = tuple(whole(f"ZNAXIS{i}") for i in range(1, min(whole("ZNAXIS"), 999) + 1))
    name = str(cards.get("EXTNAME", "")).upper()
    return Hdu(index, name, cards, kind, naxis if items else (), offset), size
