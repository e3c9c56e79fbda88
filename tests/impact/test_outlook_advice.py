"""What would help: by kind of use, with where it comes from; never a promise."""

import numpy as np
import pytest

from skylag.impact.outlook_advice import advice
from skylag.impact.uses import PUBLISHED
from skylag.ionosphere.outlook import SPAN_KINDS, Span

HOLDS, DOUBTFUL, NOT, UNKNOWN = SPAN_KINDS
START = np.datetime64("2031-05-12", "ns")


def spans(*kinds: tuple[str, int]) -> tuple[Span, ...]:
    made, at = [], START
    for kind, hours in kinds:
        end = at + np.timedelta64(hours, "h")
        made.append(Span(at, end, kind, 0.4, 0.1))
        at = end
    return tuple(made)


def test_nothing_is_said_where_all_holds() -> None:
    assert advice(PUBLISHED[0], spans((HOLDS, 48)), storm_told=True) == ()


def test_a_place_that_is_not_known_gets_one_caution() -> None:
    (said,) = advice(PUBLISHED[0], spans((UNKNOWN, 48)), storm_told=True)
    assert "not covered" in said


def test_hours_that_are_not_known_are_spoken_of() -> None:
    said = " ".join(advice(PUBLISHED[0], spans((HOLDS, 20), (UNKNOWN, 6), (HOLDS, 22)), storm_told=False))
    assert "Hours that are not known" in said and "not covered" in said


@pytest.mark.parametrize(
    ("use", "wanted"),
    [
        (PUBLISHED[0], ("shorter baseline", "half of 10 km", "Two frequencies", "IS-GPS-200", "static sessions")),
        (PUBLISHED[1], ("Approaches", "official notices")),
        (PUBLISHED[2], ("Approaches", "official notices")),
        (PUBLISHED[3], ("Two frequencies", "IS-GPS-200", "more noise")),
    ],
)
def test_what_would_help(use, wanted) -> None:  # type: ignore[no-untyped-def]
    said = advice(use, spans((HOLDS, 3), (NOT, 20), (DOUBTFUL, 5), (HOLDS, 20)), storm_told=False)
    assert "longest stretch likely to hold is 20 h" in said[0]
    text = " ".join(said)
    assert all(word in text for word in wanted)
    assert not any(word in text for word in ("will help", "safe", "guarantee", "storm"))
    stormy = " ".join(advice(use, spans((NOT, 48)), storm_told=True))
    assert "No hour" in stormy and "couple of days" in stormy
