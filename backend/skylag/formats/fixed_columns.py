"""Numbers in fixed columns, read for a whole file at once.

A RINEX observation is 16 characters: F14.3, a loss-of-lock digit, a strength digit.  The 16 characters are taken as two
little-endian 64-bit words and turned into a number by word arithmetic, eight digits at a time, so that a million
observations take some tens of milliseconds.  Never guesses: a field that is not a plain number is given back as odd.
"""

import re

import numpy as np
import numpy.typing as npt

from skylag.tables import Bytes, Floats, Ints

Windows = npt.NDArray[np.void]
Words64 = npt.NDArray[np.uint64]

FIELD = 16  # characters of one observation with its two digits

_PLAIN = re.compile(rb" *-?[0-9]*\.?[0-9]* *\Z")
_EACH = 0x0101010101010101


def _word(value: int) -> np.uint64:
    return np.uint64(value & 0xFFFFFFFFFFFFFFFF)


_SPACES = _word(0x20 * _EACH)
_FIGURES = _word(0x0F * _EACH)
_ONE_BYTE = np.uint64(8)
_LOW_SIX = _word(0x0000FFFFFFFFFFFF)
_SIX_SPACES = _word(0x0000202020202020)
# Masks that keep the first n characters of a word, n from 0 to 8.
_KEEP = np.array([(1 << (8 * n)) - 1 for n in range(9)], dtype=np.uint64)


def windows(text: Bytes, width: int = FIELD) -> Windows:
    """Every stretch of `width` bytes of the text as one item: windows(text)[at] copies those that begin `at`."""
    count = max(len(text) - width + 1, 0)
    return np.ndarray((count,), dtype=f"V{width}", buffer=text, strides=(1,))


def _stretches(text: Bytes, at: Ints) -> Words64:
    """The sixteen bytes from each `at` on as two words (N, 2); blanks behind the end of the text."""
    last = len(text) - FIELD
    if len(at) == 0 or int(at.max()) <= last:
        return windows(text)[at].view("<u8").reshape(-1, 2)
    tail_begin = max(last, 0)
    tail = np.concatenate((text[tail_begin:], np.full(2 * FIELD, 0x20, dtype=np.uint8)))
    late = at > last
    pair = np.empty((len(at), 2), dtype="<u8")
    pair[late] = windows(tail)[np.minimum(at[late], len(text)) - tail_begin].view("<u8").reshape(-1, 2)
    if not late.all():
        pair[~late] = windows(text)[at[~late]].view("<u8").reshape(-1, 2)
    return pair


def observations(text: Bytes, at: Ints, room: Ints) -> tuple[Floats, Bytes, Ints]:
    """Values, loss-of-lock digits, and which fields are odd.

    text     the bytes of the file
    at       (N,) where the fields begin
    room     (N,) characters of the line from there on; none or less: the field is absent
    returns  values (N,), NaN where blank, absent, zero or odd; digits (N,) uint8, 0 where blank; row numbers of fields
             that hold something that is not a number, or a number cut off by the end of the line
    """
    count, rows = len(at), None
    if len(room) and int(room.min()) < FIELD:
        rows = np.flatnonzero(room > 0)
        at, room = at[rows], room[rows]
    pair = _stretches(text, at)
    high, low = np.ascontiguousarray(pair[:, 0]), np.ascontiguousarray(pair[:, 1])
    if rows is not None:
        # What lies behind the end of the line belongs to the next line: blank it.
        partial = np.flatnonzero(room < FIELD)
        keep = _KEEP[np.minimum(room[partial], 8)]
        high[partial] = (high[partial] & keep) | (_SPACES & ~keep)
        keep = _KEEP[np.maximum(room[partial] - 8, 0)]
        low[partial] = (low[partial] & keep) | (_SPACES & ~keep)
    number, good = _number(high, low)
    indicator = (low >> np.uint64(48)).astype(np.uint8)  # the low byte of the word that is left
    indicator -= np.uint8(0x30)
    plain = indicator < 8
    odd_rows: Ints = np.empty(0, dtype=np.int64)
    bad = np.flatnonzero(~good)
    if len(bad):
        number[bad] = np.nan
        rest = bad[(high[bad] != _SPACES) | ((low[bad] & _LOW_SIX) != _SIX_SPACES)]  # not blank
        if len(rest):
            number[rest], odd = _unusual(high[rest], low[rest])
            odd_rows = rest[odd]
    strange = np.flatnonzero(~plain)
    if len(strange):
        strange = strange[indicator[strange] != np.uint8(0xF0)]  # a blank is 0x20 - 0x30
        odd_rows = np.union1d(odd_rows, strange) if len(strange) else odd_rows
        indicator *= plain
    number[number == 0.0] = np.nan  # RINEX 2.11, table A2: a missing observation is blank or 0.0
    if rows is None:
        return number, indicator, odd_rows
    cut = partial[(room[partial] < 14) & np.isfinite(number[partial])]
    if len(cut):
        number[cut] = np.nan
        odd_rows = np.union1d(odd_rows, cut)
    values = np.full(count, np.nan)
    digits = np.zeros(count, dtype=np.uint8)
    values[rows] = number
    digits[rows] = indicator
    return values, digits, rows[odd_rows]


def _number(high: Words64, low: Words64) -> tuple[Floats, npt.NDArray[np.bool_]]:
    """F14.3 without a sign, from its words; False where the characters are anything else than blanks and digits."""
    # The five digits of the second word, dot left out, as the last five of eight: "000" + two units + three decimals.
    tail = low & _word(0xFFFF)
    tail <<= np.uint64(24)
    other = low << np.uint64(16)
    other &= _word(0xFFFFFF0000000000)
    tail |= other
    tail |= _word(0x303030)
    np.bitwise_and(low, _word(0xFF0000), out=other)
    wrong = other ^ _word(0x2E0000)  # the dot
    digit_high = _checked(high, wrong)
    digit_tail = _checked(tail, wrong)
    # Blanks lead: behind a digit comes a digit, also from word to word, and three decimals are there.
    np.right_shift(digit_high, _ONE_BYTE, out=other)
    np.invert(other, out=other)
    other &= digit_high
    other &= _word(0x0001010101010101)
    wrong |= other
    digit_high >>= np.uint64(56)
    np.right_shift(digit_tail, np.uint64(24), out=other)
    np.invert(other, out=other)
    other &= digit_high
    wrong |= other
    np.right_shift(digit_tail, _ONE_BYTE, out=other)
    np.invert(other, out=other)
    other &= digit_tail
    other &= _word(0x0001010101000000)
    wrong |= other
    np.invert(digit_tail, out=digit_tail)
    digit_tail &= _word(0x0101010000000000)
    wrong |= digit_tail
    total = _eight(high & _FIGURES)
    total *= np.uint64(100_000)
    total += _eight(tail & _FIGURES)
    return total / 1000.0, wrong == 0


def _checked(word: Words64, wrong: Words64) -> Words64:
    """1 in each byte that is a digit; `wrong` gets bits where a byte is neither a digit nor a blank."""
    digit = word >> np.uint64(4)
    digit &= _word(_EACH)
    part = word & _word(0xE0 * _EACH)  # each byte must lie in 0x20..0x3f
    part ^= _SPACES
    wrong |= part
    np.bitwise_xor(digit, _word(_EACH), out=part)  # no digit: must be a blank
    part *= np.uint64(15)
    part &= word
    wrong |= part
    np.bitwise_and(word, _FIGURES, out=part)  # 0x3a..0x3f are no digits
    part += _word(0x06 * _EACH)
    part &= _word(0x10 * _EACH)
    wrong |= part
    return digit


def _eight(figures: Words64) -> Words64:
    """The number whose eight decimal figures are the bytes of each word, the first in the lowest; uses the words up."""
    figures *= np.uint64(2561)  # in place from here on: pairs, fours, eight
    figures >>= np.uint64(8)
    figures &= _word(0x00FF00FF00FF00FF)
    figures *= np.uint64(6553601)
    figures >>= np.uint64(16)
    figures &= _word(0x0000FFFF0000FFFF)
    figures *= np.uint64(42949672960001)
    figures >>= np.uint64(32)
    return figures


def _unusual(high: Words64, low: Words64) -> tuple[Floats, npt.NDArray[np.bool_]]:
    """Signed numbers, and numbers with the dot elsewhere (which FORTRAN reads too); True where it is neither."""
    minus, bit = _word(0x2D * _EACH), _word(0x7F * _EACH)
    signs_high = ~(((high ^ minus) & bit) + bit | (high ^ minus) | bit)  # 0x80 where the byte is a minus
    signs_low = ~(((low ^ minus) & bit) + bit | (low ^ minus) | bit) & _LOW_SIX
    # A minus becomes a blank; exactly one is allowed.
    values, good = _number(
        high ^ ((signs_high >> np.uint64(7)) * np.uint64(0x0D)), low ^ ((signs_low >> np.uint64(7)) * np.uint64(0x0D))
    )
    one = np.bitwise_count(signs_high) + np.bitwise_count(signs_low) == 1
    values = np.where(good & one, -values, np.nan)
    odd = ~(good & one)
    for row in np.flatnonzero(odd):
        characters = int(high[row]).to_bytes(8, "little") + int(low[row]).to_bytes(8, "little")[:6]
        if _PLAIN.match(characters) and any(c in b"0123456789" for c in characters):
            values[row] = float(characters)
            odd[row] = False
    return values, odd


def whole(text: Bytes, at: Ints, width: int, end: Ints) -> tuple[Ints, npt.NDArray[np.bool_]]:
    """Whole numbers of `width` characters that begin `at`, and which are well formed; blanks count as zero digits.

    Characters at or behind `end` (of the line) read as blanks.
    """
    total = np.zeros(len(at), dtype=np.int64)
    good = np.ones(len(at), dtype=bool)
    begun = np.zeros(len(at), dtype=bool)
    for k in range(width):
        character = np.where(at + k < end, text[np.minimum(at + k, len(text) - 1)], 0x20).astype(np.int64)
        figure = character - 0x30
        is_digit = (figure >= 0) & (figure <= 9)
        good &= is_digit | ((character == 0x20) & ~begun)
        begun |= is_digit
        total = total * 10 + np.where(is_digit, figure, 0)
    return total, good & begun
