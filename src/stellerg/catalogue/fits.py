"""Binary tables in FITS, read by slices of rows from the mapped file (a compressed file is unpacked whole)."""

import warnings
import zlib
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

import numpy as np

from stellerg.catalogue.raw import PART_ROWS, RawColumn, Source, check_names, first_line, looks_like_ours, no_rows
from stellerg.errors import InputError

__all__ = ["open_fits"]

_GZIP = b"\x1f\x8b"  # the first bytes of a compressed file (RFC 1952, 2.3.1)


def open_fits(path: Path) -> Source:
    """Open the first binary table of a FITS file.

    Raises
    ------
    InputError
        If the file cannot be read or ends too early, holds no binary table or no rows, or a column of ours holds more
        than one value in a cell.
    """
    with _table(path) as hdu:
        columns = {column.name: column for column in hdu.columns}
        names = [str(column.name or "").strip() for column in hdu.columns]
        check_names(path, names)
        rows = int(hdu.header["NAXIS2"])
        if rows == 0 or not names:
            raise no_rows(path)
        flat = {name for name in names if _is_flat(columns[name], hdu.columns.dtype[name])}
        for name in names:
            if name not in flat and looks_like_ours(name):
                kind = columns[name].format
                raise InputError(f"{path}: column {name!r} is an array (TFORM {kind}); give one value in a cell")
        units = {name: str(columns[name].unit).strip() for name in names if columns[name].unit}

    def parts() -> Iterator[dict[str, RawColumn]]:
        with _table(path) as hdu:
            # the cells as stored: scaling and missing values are defined on these (FITS standard 4.0, 7.3.2)
            stored = hdu.data.view(np.ndarray)
            for start in range(0, rows, PART_ROWS):
                some = stored[start : start + PART_ROWS]
                yield {name: _column(some[name], columns[name], units.get(name, "")) for name in names if name in flat}

    return Source(path, tuple(names), units, rows, parts)


@contextmanager
def _table(path: Path):
    """Open the file at its first binary table, with one message for whatever is wrong with it."""
    from astropy.io import fits

    try:
        with _quiet():
            file = fits.open(path, memmap=True)
        with file:
            with _quiet():
                hdu = next((hdu for hdu in file if type(hdu) is fits.BinTableHDU), None)
                if hdu is None:
                    raise InputError(f"{path}: the FITS file holds no binary table (BINTABLE extension)")
                _check_length(path, hdu)
                _ = hdu.columns, hdu.data  # read here, where warnings are off; the data are mapped, not loaded
            yield hdu
    except InputError:
        raise
    except (
        *(OSError, EOFError, zlib.error, ValueError, TypeError, LookupError, AttributeError, OverflowError),
        fits.VerifyError,
    ) as problem:  # whatever a damaged header leads astropy into
        raise InputError(f"{path}: not a readable FITS file, or a damaged one: {first_line(problem)}") from None


@contextmanager
def _quiet():
    """Without warnings: what matters is checked. Never held open across a yield of ours, since filters are global."""
    with warnings.catch_warnings():
        warnings.simplefilter("ignore")
        yield


def _check_length(path: Path, hdu) -> None:
    """Refuse a table of which the file holds a part only."""
    header = hdu.header
    wanted = header["NAXIS1"] * header["NAXIS2"] + header["PCOUNT"]
    with path.open("rb") as file:
        compressed = file.read(2) == _GZIP
    if not compressed and path.stat().st_size < hdu.fileinfo()["datLoc"] + wanted:
        raise InputError(f"{path}: a damaged FITS file: it ends before the last of its {header['NAXIS2']} rows")


def _is_flat(column, kind: np.dtype) -> bool:
    """Whether a cell holds one number, one truth value or one text."""
    letter = str(column.format).lstrip("0123456789")[:1]
    return letter in "LBIJKEDA" and kind.shape == () and (letter != "A" or "," not in str(column.dim or ""))


def _column(stored: np.ndarray, column, unit: str) -> RawColumn:
    import pyarrow as pa

    letter = str(column.format).lstrip("0123456789")[:1]
    if letter == "A":
        return RawColumn(pa.array(_texts(stored), pa.string()), None, unit)
    if letter == "L":
        words = np.where(stored == ord("T"), "true", np.where(stored == ord("F"), "false", ""))
        return RawColumn(pa.array(words.tolist(), pa.string()), None, unit)
    native = stored.astype(stored.dtype.newbyteorder("="))
    scale = 1.0 if column.bscale in (None, "") else float(column.bscale)
    zero = 0 if column.bzero in (None, "") else column.bzero
    if letter in "ED":
        return RawColumn(None, native.astype(float) * scale + float(zero), unit)
    if scale == 1.0 and float(zero).is_integer():
        integers = _shifted(native, int(zero))
        numbers = integers.astype(float)
    else:
        integers, numbers = None, native.astype(float) * scale + float(zero)
    if column.null not in (None, ""):
        missing = native == int(column.null)
        if zero:
            # astropy compares the shifted value: of its files the stored one alone would miss the mask
            missing |= numbers == float(int(column.null))
        numbers = np.where(missing, np.nan, numbers)
    return RawColumn(None, numbers, unit, integers)


def _shifted(native: np.ndarray, zero: int) -> np.ndarray:
    """Integers with their offset; 2^63 stands for unsigned integers of 64 bits (FITS standard 4.0, table 19)."""
    if zero == 1 << 63:
        return native.astype(np.int64).view(np.uint64) ^ np.uint64(zero)
    return native.astype(np.int64) + zero


def _texts(stored: np.ndarray) -> list[str]:
    """Texts without the blanks around them; a NUL ends a text."""
    cells = [bytes(cell).split(b"\0", 1)[0] for cell in stored.tolist()]
    try:
        return [cell.decode("utf-8").strip() for cell in cells]
    except UnicodeDecodeError:
        # the standard knows ASCII only; of what is found beside UTF-8, Latin-1 is the usual (judgement)
        return [cell.decode("latin-1").strip() for cell in cells]
