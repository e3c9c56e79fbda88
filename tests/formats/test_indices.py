"""Geomagnetic indices: the daily and three-hourly tables and the card form, published storm days, bad input."""

import contextlib

import numpy as np
import pytest
from hypothesis import given, settings
from hypothesis import strategies as st
from tests.conftest import Evidence, reference_rows

from skylag.errors import FormatError
from skylag.formats import indices
from skylag.tables import Indices

# ap of Kp 0o, 0+, 1-, ...: the published conversion table of the index's makers.
AP_OF_THIRDS = (0, 2, 3, 4, 5, 6, 7, 9, 12, 15, 18, 22, 27, 32, 39, 48, 56, 67, 80, 94, 111, 132, 154, 179, 207, 236,
                300, 400)  # fmt: skip
DAYS = reference_rows("geomagnetic_days.csv")


def thirds(tenths: str) -> list[int]:
    """Kp in thirds of tenths: 33 is 3+, 27 is 3-."""
    return [round(int(part) * 0.3) for part in tenths.split()]


def daily_line(row: dict[str, str]) -> str:
    """A line of the daily table, written as its heading says."""
    year, month, day = (int(part) for part in row["day"].split("-"))
    k = thirds(row["kp_tenths"])
    numbers = "".join(f"{third / 3:7.3f}" for third in k) + "".join(f"{AP_OF_THIRDS[third]:5d}" for third in k)
    more = f" {row['daily_ap']:>4s} 154 {row['f107']:>6s}  172.9 2"
    return f"{year:4d} {month:02d} {day:02d} 33623 33623.5 2597 18{numbers}{more}"


def card(row: dict[str, str]) -> str:
    """A card of 71 columns."""
    tenths = [int(part) for part in row["kp_tenths"].split()]
    year, month, day = row["day"].split("-")
    text = f"{year[2:]}{month}{day}259718" + "".join(f"{t:2d}" for t in tenths) + f"{sum(tenths):3d}"
    text += "".join(f"{AP_OF_THIRDS[third]:3d}" for third in thirds(row["kp_tenths"])) + f"{int(row['daily_ap']):3d}"
    return text + "1.02154" + f"{float(row['f107']):5.1f}" + "0"


def table_of(text: str) -> Indices:
    reading = indices.parse(text.encode(), "made.txt")
    assert reading.problems == ()
    assert isinstance(reading.table, Indices)
    return reading.table


@pytest.mark.parametrize("row", DAYS, ids=lambda row: row["day"])
def test_published_days_in_the_daily_table(row: dict[str, str], evidence: Evidence) -> None:
    table = table_of("# heading\n" + daily_line(row) + "\n")
    assert table.day[0] == np.datetime64(row["day"], "D")
    assert np.rint(table.kp[0] * 3).tolist() == thirds(row["kp_tenths"])
    # The daily value is the mean of the eight: a check of the three-hourly ones by the published daily one.
    evidence(f"mean of the eight ap of {row['day']}", source="published daily Ap (CelesTrak SW-All after GFZ)",
             expected=float(row["daily_ap"]), got=float(table.ap[0].mean()), tolerance=0.5)  # fmt: skip
    assert table.daily_ap[0] == float(row["daily_ap"])
    assert table.f107_observed[0] == float(row["f107"])


def test_the_card_form_says_the_same() -> None:
    rows = sorted(DAYS, key=lambda row: row["day"])
    assert all(len(card(row)) == 71 for row in rows)
    cards = table_of("\n".join(card(row) for row in rows))
    lines = table_of("\n".join(daily_line(row) for row in rows))
    assert np.array_equal(cards.day, lines.day)
    assert cards.kp == pytest.approx(lines.kp, abs=6e-4)
    assert np.array_equal(cards.ap, lines.ap)
    assert np.array_equal(cards.daily_ap, lines.daily_ap)
    assert np.array_equal(cards.f107_observed, lines.f107_observed)


def test_days_are_sorted_and_the_last_line_of_a_day_counts() -> None:
    first, second = daily_line(DAYS[0]), daily_line(DAYS[1])
    table = table_of("\n".join([second, first, first.replace(" 204 ", " 205 ")]))
    assert table.day.astype(str).tolist() == ["2003-10-29", "2003-10-30"]
    assert table.daily_ap[0] == 205


def test_missing_values_are_nan() -> None:
    line = daily_line(DAYS[0]).replace("  4.667", " -1.000", 1).replace(" 291.7", "  -1.0").replace(" 204 ", "  -1 ")
    table = table_of(line)
    assert np.isnan(table.kp[0, 0])
    assert np.isfinite(table.kp[0, 1:]).all()
    assert np.isnan(table.daily_ap[0])
    assert np.isnan(table.f107_observed[0])


def test_three_hourly_lines_make_days() -> None:
    lines = [
        f"2024 05 11 {3 * k:04.1f} {3 * k + 1.5:05.2f} 33734.00000 33734.06250 {9 - k / 3:6.3f} {300:4d} 1"
        for k in range(8)
    ]
    table = table_of("\n".join(lines))
    assert table.kp[0, 0] == 9.0
    assert table.daily_ap[0] == 300
    part = table_of("\n".join(lines[:5]))
    assert np.isnan(part.kp[0, 5:]).all()
    assert np.isnan(part.daily_ap[0])


@pytest.mark.parametrize(
    ("bad", "words"),
    [
        (daily_line(DAYS[0]).replace("  4.667", " 19.667", 1), "Kp 19.667"),
        (daily_line(DAYS[0]).replace("  4.667", " x4.667", 1), "could not convert"),
        (daily_line(DAYS[0]).replace("2003 10 29", "2003 13 29"), "2003-13-29"),
        (daily_line(DAYS[0]).replace("2003 10 29", "0003 10 29"), "year 3"),
        ("2024 05 11 04.0 01.50 33734.0 33734.1 9.000 300 1", "no three-hourly start"),
        ("something else", "none of the known forms"),
    ],
)
def test_a_broken_line_is_a_problem_and_reading_goes_on(bad: str, words: str) -> None:
    reading = indices.parse((daily_line(DAYS[1]) + "\n" + bad + "\n").encode(), "made.txt")
    assert len(reading.table.day) == 1  # type: ignore[union-attr]
    assert words in str(reading.problems[0])
    assert reading.problems[0].line == 2


def test_another_file_is_refused() -> None:
    with pytest.raises(FormatError, match="no line reads"):
        indices.parse(b"# only a heading\n", "made.txt")


@given(st.binary(max_size=400) | st.text(alphabet="0123456789 .-\n#", max_size=400).map(str.encode))
@settings(max_examples=150)
def test_any_bytes_end_in_a_table_or_a_named_error(data: bytes) -> None:
    with contextlib.suppress(FormatError):
        assert isinstance(indices.parse(data, "any").table, Indices)
