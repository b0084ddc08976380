"""Read a raw file's bytes, unpacked if it is gzipped, within stated limits of size."""

import zlib
from pathlib import Path

from steps.errors import SurveyError, mistake

LARGEST_BYTES = 4_000_000_000  # of one raw file, after unpacking
LARGEST_RATIO = 200  # of unpacked to packed: text of records does not pack better than this, a bomb does
SMALLEST_LIMIT = 1_000_000  # bytes that a file may always unpack to, whatever the ratio


def read_bytes(path: str | Path, name: str | None = None, largest: int = LARGEST_BYTES) -> bytes:
    """Return what a file holds; a gzipped one is recognised by its first bytes, not by its name.

    Parameters
    ----------
    path : str or pathlib.Path
        The file.
    name : str, optional
        What to call it in messages; its path by default.
    largest : int, optional
        Most bytes that are read or unpacked.

    Returns
    -------
    bytes

    Raises
    ------
    SurveyError
        If the file is larger than the limit, unpacks to more than `LARGEST_RATIO` times its size, or is not whole.

    """
    name = name or str(path)
    with open(path, "rb") as handle:
        data = handle.read(largest + 1)
    if len(data) > largest:
        raise SurveyError(mistake(name, f"must be under {_size(largest)}", "a larger file", "Split it."))
    if data[:2] == b"\x1f\x8b":
        data = _unpack(data, min(largest, max(SMALLEST_LIMIT, LARGEST_RATIO * len(data))), name)
    elif data[:4] == b"PK\x03\x04":
        raise SurveyError(
            mistake(
                name, "must be text, or gzipped text", "a zip archive or a workbook", "Unpack it, or save it as text."
            )
        )
    return data


def _unpack(data: bytes, limit: int, name: str) -> bytes:
    """Unpack all members of a gzip file, stopping at the limit."""
    parts, room = [], limit
    while data:
        member = zlib.decompressobj(wbits=31)
        try:
            part = member.decompress(data, room + 1)
        except zlib.error as error:
            said = str(error).rpartition(": ")[2]
            raise SurveyError(mistake(name, "must be a whole gzip file", said, "Copy it again.")) from error
        room -= len(part)
        if room < 0:
            raise SurveyError(mistake(name, f"must unpack to under {_size(limit)}", "more", "Unpack it by hand."))
        if not member.eof:
            raise SurveyError(mistake(name, "must be a whole gzip file", "one cut short", "Copy it again."))
        parts.append(part)
        data = member.unused_data.lstrip(b"\0")  # some tapes and tools pad with zeros
    return b"".join(parts)


def _size(limit: int) -> str:
    return f"{limit / 1e9:g} GB" if limit >= 1e9 else f"{limit / 1e6:g} MB"
