"""Take the lines of an NMEA 0183 log apart: which sentence each is, whether it is whole, and what its fields say.

Works on arrays, a block of text at a time and without a loop over sentences: line ends, commas, ``$`` and ``*`` are
found in one pass, the exclusive-or of each sentence is one reduction, and fields of equal width are read digit by digit
for all sentences at once. Numbers are read as integers, so that values are those that reading the text exactly gives.
"""

import re
from collections.abc import Iterator
from dataclasses import dataclass

import numpy as np

from steps import clock

BLOCK_BYTES = 1 << 21  # of text worked on at a time: what is made of it fits a processor's cache
NS = 1_000_000_000
NONE = np.iinfo(np.int64).min  # no time
KNOT_MPS = 1852.0 / 3600.0
KMH_MPS = 1000.0 / 3600.0

KINDS = ("GGA", "RMC", "GLL", "VTG", "ZDA", "HDT")  # of the first three the earlier is the better position
GGA, RMC, GLL, VTG, ZDA, HDT = range(6)
HOLDERS = {"b": (GGA, RMC, GLL), "day": (RMC, ZDA), "course": (RMC, VTG), "speed": (RMC, VTG)}
FEWEST_FIELDS = np.array([14, 9, 4, 8, 4, 2])  # a sentence with fewer was cut short
_CODES = [int.from_bytes(name.encode(), "little") for name in KINDS]
_MANUAL, _SIMULATED, _ESTIMATED = ord("7"), ord("8"), ord("6")  # qualities of GGA that are no fix, and dead reckoning

_HEX = np.full(256, 255, np.uint8)
for _digit in b"0123456789abcdefABCDEF":
    _HEX[_digit] = int(chr(_digit), 16)
_ADDRESS = np.zeros(256, bool)
_ADDRESS[list(b"0123456789ABCDEFGHIJKLMNOPQRSTUVWXYZ")] = True
_STAMP = re.compile(
    rb"(\d{4})-(\d\d)-(\d\d)[T ](\d\d):(\d\d):(\d\d)(?:[.,](\d{1,9}))?\s?(Z|UTC|[+-]\d\d:?\d\d)?[\s,;]*"
)


def blocks(data: bytes) -> Iterator[np.ndarray]:
    """Cut a log after line ends, each block with a last line end and eight bytes to spare behind it."""
    start = 0
    while start < len(data):
        end = data.rfind(b"\n", start, start + BLOCK_BYTES) + 1
        if end <= start:
            end = data.find(b"\n", start) + 1 or len(data)
        size = end - start
        closed = data[end - 1] == 10
        block = np.zeros(size + (not closed) + 8, np.uint8)
        block[:size] = np.frombuffer(data, np.uint8, size, start)
        if not closed:
            block[size] = 10
        yield block
        start = end


@dataclass
class Part:
    """What is read of a block of lines, or of a log.

    Attributes
    ----------
    values : dict of str to array
        Of each sentence of `KINDS`: ``row`` (from 0 in the block), ``kind``, ``tod`` and ``stamp`` (ns, or NONE),
        ``valid``, ``a`` (latitude, or heading; NaN where there is none). Of some kinds only, see `HOLDERS`: ``b``
        (longitude), ``day`` (ns, or NONE), ``course`` (degrees), ``speed`` (m/s).
    counts : dict of str to int
        Lines of the block, and those that are no sentence of `KINDS`, by reason.
    skipped : dict of str to int
        Sentences of other kinds, by name.
    talkers : dict of int to set of int
        By kind of position, the talkers that were heard.
    doubtful : int
        Positions by dead reckoning.

    """

    values: dict[str, np.ndarray]
    counts: dict[str, int]
    skipped: dict[str, int]
    talkers: dict[int, set[int]]
    doubtful: int


def take_apart(block: np.ndarray) -> Part:
    """Read every line of a block.

    Parameters
    ----------
    block : array of uint8
        One of `blocks`.

    Returns
    -------
    Part

    """
    text = block[:-8]
    scratch = np.empty((2, len(text)), bool)
    special = _special(text, scratch)
    mark = text[special]
    last = np.flatnonzero(mark == 10)  # the line end of each line, as an index into special
    first = np.concatenate([[0], last[:-1] + 1])
    stop = special[last]
    start = np.concatenate([[0], stop[:-1] + 1])
    row = np.arange(len(last))
    counts = {"lines": len(last)}
    stop = _trim(text, start, stop)

    opening = (mark == 36) | (mark == 33)
    at = _beginnings(opening, first, last)
    there = at < last
    if not there.all():
        counts["blank"] = int(np.count_nonzero(stop <= start))
        counts["no sentence"] = int(np.count_nonzero(~there & (stop > start)))
        start, stop, last, row, at = (x[there] for x in (start, stop, last, row, at))
    begin = special[at]
    before = special[last - 1]
    starred = text[before] == 42
    star = np.where(starred, before, stop)
    good = _one_body(text, scratch[0], mark, opening, last, at, begin, stop, starred)
    high, low = _HEX[block[star + 1]], _HEX[block[star + 2]]
    good &= ~starred | ((star + 3 == stop) & (high < 16) & (low < 16))
    pairs = np.empty(2 * len(at), np.int64)
    pairs[::2], pairs[1::2] = begin + 1, star
    exclusive_or = np.bitwise_xor.reduceat(text, pairs)[::2] if len(at) else high
    wrong = good & starred & (star > begin + 1) & (exclusive_or != high * np.uint8(16) + low)
    good &= ~wrong
    counts["wrong checksum"] = int(np.count_nonzero(wrong))

    word = _words(block)[begin]  # "$GPGGA,." as one number
    kind = _kinds(word)
    fields = last - starred - at - 1
    good &= (kind < 0) | (fields >= FEWEST_FIELDS[kind])
    others = np.flatnonzero(good & (kind < 0))
    names, named = _names(block, word[others], begin[others], star[others])
    good[others] = named
    counts["malformed"] = len(good) - int(np.count_nonzero(good)) - counts["wrong checksum"]

    chosen = np.flatnonzero(good & (kind >= 0))
    kind, at, fields, star = kind[chosen], at[chosen], fields[chosen], star[chosen]
    n = len(chosen)
    values = {
        "row": row[chosen],
        "kind": kind,
        "tod": np.full(n, NONE),
        "stamp": _stamps(block, start[chosen], begin[chosen]),
        "valid": np.ones(n, bool),
        "a": np.full(n, np.nan),
    }
    holders = {name: holding(kind, name) for name in HOLDERS}
    values |= {name: np.full(len(rows), NONE if name == "day" else np.nan) for name, rows in holders.items()}
    talkers, doubtful = {}, 0
    for number, read in enumerate((_gga, _rmc, _gll, _vtg, _zda, _hdt)):
        which = np.flatnonzero(kind == number)
        if len(which) == 0:
            continue
        found = read(_Fields(block, special, at[which], fields[which], star[which]))
        if number <= GLL:
            doubtful += int(np.count_nonzero(found.pop("doubtful") & found["valid"]))
            codes = (word[chosen[which]] >> np.uint64(8)).astype(np.uint16)
            talkers[number] = {int(codes[0])} if (codes == codes[0]).all() else set(np.unique(codes).tolist())
        for name, column in found.items():
            into = np.searchsorted(holders[name], which) if name in holders else which
            values[name][into] = column
    return Part(values, counts, names, talkers, doubtful)


def holding(kind: np.ndarray, name: str) -> np.ndarray:
    """Return the sentences of the kinds that hold a value of `HOLDERS`."""
    return np.flatnonzero(np.logical_or.reduce([kind == number for number in HOLDERS[name]]))


def _special(text: np.ndarray, scratch: np.ndarray) -> np.ndarray:
    """Find line ends, commas, stars, ``$`` and ``!``."""
    found, own = scratch
    np.equal(text, 10, out=found)
    for byte in b",*$!":
        np.equal(text, byte, out=own)
        np.logical_or(found, own, out=found)
    return np.flatnonzero(found)


def _words(block: np.ndarray) -> np.ndarray:
    """See the eight bytes from every place as a number, without a copy."""
    return np.ndarray(len(block) - 7, "<u8", block, strides=(1,))


def _trim(text, start, stop):
    """Move the ends of lines before blanks and carriage returns."""
    for _ in range(8):
        low = text[np.maximum(stop - 1, 0)] <= 32
        blank = np.flatnonzero(low & (stop > start))
        last = text[stop[blank] - 1]
        blank = blank[(last == 13) | (last == 32) | (last == 9)]
        if len(blank) == 0:
            return stop
        stop = stop.copy()
        stop[blank] -= 1
    for k in blank.tolist():  # a long run of blanks is no business of a sentence
        stop[k] = start[k] + len(text[start[k] : stop[k]].tobytes().rstrip(b" \t\r"))
    return stop


def _beginnings(opening, first, last):
    """Find the ``$`` or ``!`` that begins the sentence of each line; the line end where there is none."""
    at = np.where(opening[first], first, last)
    other = np.flatnonzero((at == last) & (first < last))
    if len(other):
        openings = np.append(np.flatnonzero(opening), len(opening))
        found = openings[np.searchsorted(openings, first[other])]
        at[other] = np.minimum(found, last[other])
    return at


def _one_body(text, scratch, mark, opening, last, at, begin, stop, starred):
    """Tell which sentences have one beginning, one star at most, and nothing but printable ASCII."""
    good = np.ones(len(last), bool)
    odd = []
    if np.count_nonzero(opening) > len(at):
        odd.append(np.flatnonzero(opening))
    if np.count_nonzero(mark == 42) > np.count_nonzero(starred):
        odd.append(np.flatnonzero(mark == 42))
    for token in odd:
        line = np.searchsorted(last, token)
        token, line = token[line < len(last)], line[line < len(last)]
        usual = (token <= at[line]) | ((mark[token] == 42) & (token == last[line] - 1))
        good[line[~usual]] = False
    # Bytes that no sentence may hold: looked for only where the numbers of line ends do not explain all low bytes.
    low = np.count_nonzero(np.less(text, 32, out=scratch))
    lines = np.count_nonzero(mark == 10)
    if text.max() > 126 or low not in (lines, 2 * lines) or low != lines + np.count_nonzero(text == 13):
        odd = np.flatnonzero((text > 126) | ((text < 32) & (text != 10)))
        line = np.searchsorted(stop, odd, side="right")
        line, odd = line[line < len(stop)], odd[line < len(stop)]
        good[line[odd > begin[line]]] = False
    return good


def _kinds(word):
    """Return of each sentence the index into `KINDS`, -1 for another; `word` is its first eight bytes as a number."""
    code = (word >> np.uint64(24)).astype(np.uint32) & np.uint32(0xFFFFFF)
    kind = np.full(len(word), -1, np.int8)
    for number, known in enumerate(_CODES):
        kind[code == known] = number
    one, two = ((word >> np.uint64(shift)).astype(np.uint8) for shift in (8, 16))
    usual = ((word & np.uint64(0x00FF0000000000FF)) == np.uint64(0x002C000000000024)) & (one != 80)  # $P: a maker's own
    return np.where(usual & _ADDRESS[one] & _ADDRESS[two], kind, np.int8(-1))


def _names(block, word, begin, star):
    """Count sentences that are not read by name (formatter, or P and the maker's letters); tell which have one."""
    own = block[begin + 1] == 80
    named = (star == begin + 6) | ((star > begin + 6) & (block[begin + 6] == 44)) | (own & (star >= begin + 5))
    for place in range(1, 6):
        named &= _ADDRESS[block[begin + place]] | (own & (place == 5))
    code = np.where(own, word >> np.uint64(8), (word >> np.uint64(24)) & np.uint64(0xFFFFFF)) & np.uint64(0xFFFFFFFF)
    named &= own | ~np.isin(code, _CODES)  # one of those that are read, without a comma behind it
    values, numbers = np.unique(code[named], return_counts=True)
    texts = [int(value).to_bytes(8, "little").rstrip(b"\0").decode("ascii") for value in values]
    return dict(zip(texts, numbers.tolist(), strict=True)), named


# -- reading fields --------------------------------------------------------------------------------------------------


@dataclass
class _Fields:
    """The fields of sentences of one kind, by place in the text."""

    block: np.ndarray
    special: np.ndarray
    at: np.ndarray
    fields: np.ndarray
    end: np.ndarray

    def __post_init__(self):
        self.fewest = int(self.fields.min())

    def place(self, number):
        """Return where a field begins and ends; both the same where a sentence has no such field."""
        token = self.at + number
        if self.fewest > number:
            return self.special[token] + 1, self.special[token + 1]
        token = np.minimum(token, len(self.special) - 1)
        after = self.special[np.minimum(token + 1, len(self.special) - 1)]
        begin = np.minimum(self.special[token] + 1, self.end)
        return begin, np.where(self.fields >= number, np.minimum(after, self.end), begin)

    def letter(self, number):
        """Return the only byte of a field, 0 where the field has none or several."""
        begin, end = self.place(number)
        return np.where(end - begin == 1, self.block[begin], np.uint8(0))

    def decimal(self, number):
        """Return a field as a `_Decimal`."""
        return _decimal(self.block, *self.place(number))

    def number(self, number):
        """Return a field as float64, NaN where it is no unsigned decimal number."""
        return self.decimal(number).value()


@dataclass
class _Decimal:
    """Unsigned decimal numbers, exact: whole part (-1: none) and its digits, fraction in units of 1/scale."""

    whole: np.ndarray
    fraction: np.ndarray
    scale: np.ndarray | np.int64
    digits: np.ndarray | np.int64

    def value(self):
        """Return the nearest float64, as reading the text would give it; NaN where there is no number."""
        number = (self.whole * self.scale + self.fraction) / self.scale
        return number if self.scale.ndim == 0 else np.where(self.whole < 0, np.nan, number)


def _cells(block, begin, width):
    """Copy `width` bytes from each place: an array of shape (width, n), so that one column of cells lies together."""
    window = np.ndarray(len(block) - width + 1, f"V{width}", block, strides=(1,))
    return np.ascontiguousarray(window[begin].view(np.uint8).reshape(-1, width).T)


def _horner(digit, columns: range):
    """Put the digits of neighbouring columns together, two at a time."""
    width = len(columns)
    value = np.zeros(digit.shape[1], np.int32 if width < 10 else np.int64)
    if width % 2:
        value += digit[columns[0]]
    for column in columns[width % 2 :: 2]:
        value *= 100
        value += digit[column] * np.uint8(10) + digit[column + 1]
    return value


def _decimal(block, begin, end) -> _Decimal:
    """Read unsigned decimal numbers of up to 18 characters; those of equal width and point together."""
    width = np.minimum(end - begin, 19)
    sizes = np.flatnonzero(np.bincount(width))
    n, found = len(begin), []
    for size in sizes.tolist():
        if not 0 < size < 19:
            continue
        rows = np.flatnonzero(width == size) if len(sizes) > 1 else None
        digit = _cells(block, begin if rows is None else begin[rows], size) - np.uint8(48)
        for place, chosen in _points(digit, size):
            if size == 1 and place == 0:
                continue
            own = digit if chosen is None else digit[:, chosen]
            into = chosen if rows is None else rows if chosen is None else rows[chosen]
            scale = np.int64(10 ** max(size - place - 1, 0))
            number = _Decimal(_horner(own, range(place)), _horner(own, range(place + 1, size)), scale, np.int64(place))
            if into is None:
                return number
            found.append((into, number))
    whole, fraction = np.full(n, -1, np.int64), np.zeros(n, np.int64)
    scale, digits = np.ones(n, np.int64), np.zeros(n, np.int64)
    for into, number in found:
        whole[into], fraction[into], scale[into], digits[into] = (
            number.whole,
            number.fraction,
            number.scale,
            number.digits,
        )
    return _Decimal(whole, fraction, scale, digits)


def _points(digit, size):
    """Tell where the decimal points of cells of one width are: (place, rows), with None for all rows."""
    odd = np.flatnonzero(digit.max(axis=1) > 9)
    if len(odd) == 0:
        return [(size, None)]
    point = digit == 254  # "." is 46
    if len(odd) == 1 and point[odd[0]].all():
        return [(int(odd[0]), None)]
    place = np.where(point.any(axis=0), point.argmax(axis=0), size)
    proper = ((digit <= 9) | (np.arange(size)[:, None] == place)).all(axis=0)
    return [(int(p), np.flatnonzero(proper & (place == p))) for p in np.flatnonzero(np.bincount(place[proper]))]


def _time_of_day(s: _Fields, number) -> np.ndarray:
    """Read hhmmss.ss as ns since midnight, NONE where it is none. 23:59:60 is the next midnight."""
    d = s.decimal(number)
    hour, minute, second = d.whole // 10000, d.whole // 100 % 100, d.whole % 100
    good = (d.digits == 6) & (d.scale <= NS) & (hour < 24) & (minute < 60)
    leap = (second == 60) & (hour == 23) & (minute == 59)
    good &= (second < 60) | leap
    ns = ((hour * 60 + minute) * 60 + second).astype(np.int64) * NS
    ns += np.where(leap, 0, d.fraction * (NS // np.minimum(d.scale, NS)))
    return np.where(good, ns, NONE)


def _midnight(year, month, day) -> np.ndarray:
    """Return midnights in ns since 1970, NONE where there is no such day, or none since GPS time began."""
    ns, good = clock.midnights(year, month, day)
    return np.where(good & (year >= 1980), ns, NONE)


def _angle(s: _Fields, number, sides: str) -> np.ndarray:
    """Read (d)ddmm.mmmm and the letter after it in degrees; NaN where it is no position on Earth."""
    d, letter = s.decimal(number), s.letter(number + 1)
    degrees = d.whole // 100
    minutes = ((d.whole - degrees * 100) * d.scale + d.fraction) / d.scale
    value = degrees + minutes / 60.0
    limit, width = (90.0, 4) if sides == "NS" else (180.0, 5)
    good = (d.digits == width) & (d.whole >= 0) & (minutes < 60.0) & (value <= limit)
    good &= (letter == ord(sides[0])) | (letter == ord(sides[1]))
    return np.where(good, np.where(letter == ord(sides[1]), -value, value), np.nan)


def _course(value):
    return np.where((value >= 0) & (value <= 360), value % 360.0, np.nan)


def _gga(s):
    quality = s.letter(6)
    real = (quality > ord("0")) & (quality <= ord("9")) & (quality != _MANUAL) & (quality != _SIMULATED)
    position = {"a": _angle(s, 2, "NS"), "b": _angle(s, 4, "EW")}
    return {"tod": _time_of_day(s, 1), "valid": real, "doubtful": quality == _ESTIMATED} | position


def _real(mode) -> np.ndarray:
    """Tell which mode indicators (NMEA 0183 version 2.3 and later, else absent) are those of a real fix."""
    return (mode != ord("N")) & (mode != ord("M")) & (mode != ord("S"))


def _rmc(s):
    mode = s.letter(12)
    real = (s.letter(2) == ord("A")) & _real(mode)
    date = s.decimal(9)
    year = date.whole % 100
    midnight = _midnight(year + np.where(year < 80, 2000, 1900), date.whole // 100 % 100, date.whole // 10000)
    return {
        "tod": _time_of_day(s, 1),
        "valid": real,
        "doubtful": mode == ord("E"),
        "day": np.where(real & (date.digits == 6) & (date.scale == 1), midnight, NONE),
        "a": _angle(s, 3, "NS"),
        "b": _angle(s, 5, "EW"),
        "course": _course(s.number(8)),
        "speed": s.number(7) * KNOT_MPS,
    }


def _gll(s):
    status, mode = s.letter(6), s.letter(7)
    real = ((status == ord("A")) | (s.fields < 6)) & _real(mode)
    position = {"a": _angle(s, 1, "NS"), "b": _angle(s, 3, "EW")}
    return {"tod": _time_of_day(s, 5), "valid": real, "doubtful": mode == ord("E")} | position


def _vtg(s):
    knots, kmh = s.number(5) * KNOT_MPS, s.number(7) * KMH_MPS
    return {
        "valid": _real(s.letter(9)),
        "course": _course(s.number(1)),
        "speed": np.where(np.isnan(knots), kmh, knots),
    }


def _zda(s):
    day, month, year = (s.decimal(number) for number in (2, 3, 4))
    good = (day.digits == 2) & (month.digits == 2) & (year.digits == 4)
    good &= (day.scale == 1) & (month.scale == 1) & (year.scale == 1)
    midnight = _midnight(year.whole, month.whole, day.whole)
    return {"tod": _time_of_day(s, 1), "day": np.where(good, midnight, NONE)}


def _hdt(s):
    return {"a": _course(s.number(1)), "valid": s.letter(2) == ord("T")}


def _stamps(block, start, begin) -> np.ndarray:
    """Read the ISO 8601 time that a logger wrote before each sentence; NONE where there is none."""
    stamps = np.full(len(start), NONE)
    width = np.minimum(begin - start, 64)
    sizes = np.flatnonzero(np.bincount(width)) if len(width) else []
    for size in sizes:
        if not 19 <= size < 64:
            continue
        rows = np.flatnonzero(width == size) if len(sizes) > 1 else np.arange(len(width))
        for _ in range(4):  # layouts of this width; one is usual
            place = start[rows]
            found = _STAMP.fullmatch(block[place[0] : place[0] + size].tobytes())
            like = np.zeros(len(rows), bool)
            if found:
                like, times = _stamps_like(block, place, size, found)
                stamps[rows] = np.where(like, times, stamps[rows])
            like[0] = True
            if like.all():
                break
            rows = rows[~like]
    return stamps


def _stamps_like(block, place, size, found):
    """Read the stamps that are laid out as the one that was matched."""
    # Date, hour and minute, the first sixteen bytes, change seldom: they are read once for each run of equal ones.
    head = [_words(block)[place + k] for k in (0, 8)]
    begins = np.flatnonzero((head[0][1:] != head[0][:-1]) | (head[1][1:] != head[1][:-1])) + 1
    begins = np.concatenate([[0], begins])
    cells = _cells(block, place[begins], 16)
    digit = cells - np.uint8(48)
    columns = [range(0, 4), range(5, 7), range(8, 10), range(11, 13), range(14, 16)]
    proper = np.ones(len(begins), bool)
    for column in (4, 7, 10, 13):
        proper &= cells[column] == cells[column, 0]
    for group in columns:
        proper &= (digit[group] <= 9).all(axis=0)
    year, month, day, hour, minute = (_horner(digit, group) for group in columns)
    midnight = _midnight(year, month, day)
    proper &= (midnight != NONE) & (hour < 24) & (minute < 60)
    lengths = np.diff(np.append(begins, len(place)))
    ns = np.repeat(np.where(proper, midnight, 0) + (hour * 60 + minute).astype(np.int64) * (60 * NS), lengths)
    like = np.repeat(proper, lengths)

    cells = _cells(block, place + 16, size - 16)
    digit = cells - np.uint8(48)
    fraction = range(*found.span(7)) if found.group(7) else range(0)
    digits = [1, 2, *(column - 16 for column in fraction)]
    for column in range(size - 16):
        like &= (digit[column] <= 9) if column in digits else (cells[column] == cells[column, 0])
    second = _horner(digit, range(1, 3))
    like &= second <= 60
    ns += second.astype(np.int64) * NS
    if fraction:
        ns += _horner(digit, range(4, 4 + len(fraction))).astype(np.int64) * 10 ** (9 - len(fraction))
    zone = found.group(8) or b""
    if zone[:1] in (b"+", b"-"):
        ahead = (int(zone[1:3]) * 60 + int(zone[-2:])) * 60 * NS
        ns += -ahead if zone[:1] == b"+" else ahead
    return like, ns
