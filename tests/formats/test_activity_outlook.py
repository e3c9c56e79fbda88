"""Outlooks of activity: both forms, the table of Kp and ap, the end of a year, what is refused."""

import numpy as np
import pytest
from tests.conftest import Evidence

from skylag.errors import FormatError
from skylag.formats.activity_outlook import ap_of_kp, parse

THREE_DAYS = """:Product: invented for a test
:Issued: {issued} UTC

             {dates}
00-03UT       3.00         5.67 (G2)    4.33
03-06UT       2.67         6.00 (G2)    4.00
06-09UT       2.33         6.33 (G2)    3.67
09-12UT       2.00         7.00 (G3)    3.33
12-15UT       1.67         5.00 (G1)    3.00
15-18UT       1.33         4.67 (G1)    2.67
18-21UT       1.00         4.33         2.33
21-00UT       3.33         4.00         2.00
"""


def test_a_table() -> None:
    rows = b"2031-05-10T12:30Z,2031-05-11,12\n2031-05-10T12:30Z,2031-05-12,80"
    read = parse(b"# entered by hand\nmade_utc,day,ap\n" + rows, "t")
    assert [str(day) for day in read.day] == ["2031-05-11", "2031-05-12"]
    assert str(read.made[0]) == "2031-05-10T12:30:00.000000000" and read.ap.tolist() == [[12.0] * 8, [80.0] * 8]
    eight = parse(b"day,made_utc,kp1,kp2,kp3,kp4,kp5,kp6,kp7,kp8\n2031-05-11,2031-05-10,0,1,2,3,4,5,6,6.67\n", "t")
    assert eight.ap.tolist() == [[0, 4, 7, 15, 27, 48, 80, 111]]


def test_a_three_day_forecast() -> None:
    read = parse(THREE_DAYS.format(issued="2031 May 10 1230", dates="May 10       May 11       May 12").encode(), "f")
    assert [str(day) for day in read.day] == ["2031-05-10", "2031-05-11", "2031-05-12"]
    assert (read.made == np.datetime64("2031-05-10T12:30")).all()
    assert read.ap[:, 0].tolist() == [15.0, 67.0, 32.0] and read.ap[1, 3] == 132.0
    turn = parse(THREE_DAYS.format(issued="2031 Dec 30 0030", dates="Dec 30       Dec 31       Jan 01").encode(), "f")
    assert str(turn.day[2]) == "2032-01-01"


def test_kp_and_ap(evidence: Evidence) -> None:
    told = {0: 0, 1.333: 5, 3.667: 22, 4.667: 39, 5: 48, 6.333: 94, 7.667: 179, 8.667: 300, 9: 400}
    for kp, ap in told.items():
        evidence(f"ap of Kp {kp:g}", source="conversion table of the index's makers (GFZ, Matzka et al. 2021)",
                 expected=ap, got=float(ap_of_kp(np.array([kp]))[0]), tolerance=0, unit="2 nT")  # fmt: skip


def test_the_line_of_an_error_is_counted_in_the_file() -> None:
    """Comments and empty lines count too."""
    good = "2031-05-10,2031-05-11,12\n"
    text = f"# by hand\n\nmade_utc,day,ap\n{good}# a remark\n\n2031-05-10,2031-05-12,twelve\n{good}"
    with pytest.raises(FormatError, match="twelve") as told:
        parse(text.encode(), "file")
    assert told.value.details["line"] == 7
    with pytest.raises(FormatError, match="made_utc is lacking") as told:
        parse(f"# by hand\n\nday,ap\n{good}".encode(), "file")
    assert told.value.details["line"] == 3


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("", "is no outlook of activity"),
        ("made_utc,day\n2031-05-10,2031-05-11\n", "made_utc,day,ap"),
        ("day,ap\n2031-05-11,12\n", "made_utc is lacking"),
        ("made_utc,day,ap\n2031-05-10,2031-05-11,twelve\n", "is no line like"),
        ("made_utc,day,ap\n2031-05-10,2031-05-11\n", "is no line like"),
        ("made_utc,day,kp\n2031-05-10,2031-05-11,12\n", "outside 0 to 9"),
        ("made_utc,day,ap\n2031-05-10,2031-02-31,12\n", "is no line like"),
        (THREE_DAYS.format(issued="2031 May 10 1230", dates="").replace("09-12UT", "x"), "cannot be read"),
        (THREE_DAYS.format(issued="2031 May 10 1230", dates="May 1  May 2  May 3").replace("5.67", "5.x"), "cannot be"),
    ],
)  # fmt: skip
def test_what_cannot_be_read(text: str, said: str) -> None:
    with pytest.raises(FormatError, match=said):
        parse(text.encode(), "file")
