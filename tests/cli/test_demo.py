"""`skylag demo` as a newcomer runs it: one command, and a page with a first map."""

from tests.journeys.newcomer import Newcomer


def test_demo_serves_a_first_map_and_then_the_other_days(newcomer: Newcomer) -> None:
    assert "not for navigation" in newcomer.line
    assert "Skylag" in newcomer.page
    assert "2031-03-12" in newcomer.first_days, "the storm day is made first: it has the most to see"
    assert newcomer.first_map_s < 90.0, "from the command to a page with a first map"
    assert newcomer.status in (0, 130), "Ctrl-C ends it quietly"
