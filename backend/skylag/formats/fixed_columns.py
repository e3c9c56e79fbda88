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
    shortest = int(room.min()) if len(room) else FIELD
    if shortest >= FIELD:
        rows = None
        pair = _stretches(text, at)
    else:
        rows = np.flatnonzero(room > 0)
        pair = _stretches(text, at[rows])
        # What lies behind the end of the line belongs to the next line: blank it.
        left = np.minimum(room[rows], FIELD)
        keep = _KEEP[np.minimum(left, 8)]
        pair[:, 0] = (pair[:, 0] & keep) | (_SPACES & ~keep)
        keep = _KEEP[np.maximum(left - 8, 0)]
        pair[:, 1] = (pair[:, 1] & keep) | (_SPACES & ~keep)
    high, low = np.ascontiguousarray(pair[:, 0]), np.ascontiguousarray(pair[:, 1])
    number, good = _number(high, low)
    indicator = (low >> np.uint64(48)).astype(np.uint8)  # the low byte of the word that is left
    indicator -= np.uint8(0x30)
    plain = indicator < 8
    odd_rows: Ints = np.empty(0, dtype=np.int64)
    if not good.all():
        blank = (high == _SPACES) & ((low & _LOW_SIX) == _SIX_SPACES)
        number[~good] = np.nan
        rest = np.flatnonzero(~good & ~blank)
        if len(rest):
            number[rest], odd = _unusual(high[rest], low[rest])
            odd_rows = rest[odd]
    if not plain.all():
        strange = ~plain & (indicator != np.uint8(0xF0))  # a blank is 0x20 - 0x30
        if strange.any():
            odd_rows = np.union1d(odd_rows, np.flatnonzero(strange))
        indicator[~plain] = 0
    if rows is None:
        values, digits = number, indicator
    else:
        cut = np.flatnonzero((left < 14) & np.isfinite(number))
        if len(cut):
            number[cut] = np.nan
            odd_rows = np.union1d(odd_rows, cut)
        values = np.full(len(at), np.nan)
        digits = np.zeros(len(at), dtype=np.uint8)
        values[rows] = number
        digits[rows] = indicator
        odd_rows = rows[odd_rows]
    values[values == 0.0] = np.nan  # RINEX 2.11, table A2: a missing observation is blank or 0.0
    return values, digits, odd_rows


def _number(high: Words64, low: Words64) -> tuple[Floats, npt.NDArray[np.bool_]]:
    """F14.3 without a sign, from its words; False where the characters are anything else than blanks and digits."""
    bit, ones = _word(0x01 * _EACH), np.uint64(8)
    # The five digits of the second word, dot left out, as the last five of eight: "000" + two units + three decimals.
    tail = (
        ((low & _word(0xFFFF)) << np.uint64(24))
        | ((low << np.uint64(16)) & _word(0xFFFFFF0000000000))
        | _word(0x303030)
    )  # fmt: skip
    digit_high, digit_tail = (high >> np.uint64(4)) & bit, (tail >> np.uint64(4)) & bit
    wrong = (high & _word(0xE0 * _EACH)) ^ _SPACES  # each byte must lie in 0x20..0x3f
    wrong |= (tail & _word(0xE0 * _EACH)) ^ _SPACES
    wrong |= ((digit_high ^ bit) * np.uint64(15)) & high  # no digit: must be a blank
    wrong |= ((digit_tail ^ bit) * np.uint64(15)) & tail
    figures_high, figures_tail = high & _word(0x0F * _EACH), tail & _word(0x0F * _EACH)
    wrong |= (figures_high + _word(0x06 * _EACH)) & _word(0x10 * _EACH)  # 0x3a..0x3f are no digits
    wrong |= (figures_tail + _word(0x06 * _EACH)) & _word(0x10 * _EACH)
    # Blanks lead: behind a digit comes a digit, also from word to word.
    wrong |= digit_high & ~(digit_high >> ones) & _word(0x0001010101010101)
    wrong |= (digit_high >> np.uint64(56)) & ~(digit_tail >> np.uint64(24))
    wrong |= digit_tail & ~(digit_tail >> ones) & _word(0x0001010101000000)
    wrong |= ~digit_tail & _word(0x0101010000000000)  # three decimals
    wrong |= (low & _word(0xFF0000)) ^ _word(0x2E0000)  # the dot
    total = _eight(figures_high) * np.uint64(100_000) + _eight(figures_tail)
    return total / 1000.0, wrong == 0


def _eight(figures: Words64) -> Words64:
    """The number whose eight decimal figures are the bytes of each word, first figure in the lowest byte."""
    pairs = ((figures * np.uint64(2561)) >> np.uint64(8)) & _word(0x00FF00FF00FF00FF)
    fours = ((pairs * np.uint64(6553601)) >> np.uint64(16)) & _word(0x0000FFFF0000FFFF)
    return (fours * np.uint64(42949672960001)) >> np.uint64(32)


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
