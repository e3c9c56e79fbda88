"""Figures of a survey day in sentences: of what is known only, and how much of the day that is."""

from dataclasses import replace

import numpy as np
import pytest
from tests.builders import REGION, STORM_DAY

from skylag.archive import Archive
from skylag.formats.sheet import DayChart
from skylag.impact import survey
from skylag.impact.survey import Advice, Job
from skylag.jobs.advising import DayAdvice
from skylag.tables import Fields, Site
from skylag.web import report

CLOCK = report.Clock("UTC")
SITE = REGION.sites[3]


@pytest.fixture(scope="module")
def day(small_archive: Archive) -> DayAdvice:
    return DayAdvice(small_archive, small_archive.day(REGION.name, STORM_DAY))


def seen(day: DayAdvice, first: int, last: int, kept: int = 10**6) -> Advice:
    """The day as it would be told, had the maps seen nothing but the epochs from first to last."""
    whole = day.fields
    state, slope, sigma, vtec = (getattr(whole, name).copy() for name in ("state", "slope", "slope_sigma", "vtec"))
    east, north = np.full_like(slope, 0.5), np.full_like(slope, 0.5)
    for layer, nothing, calm in ((state, 0, 1), (slope, np.nan, 0.7), (sigma, np.nan, 0.1), (vtec, np.nan, 10.0)):
        layer[...] = nothing
        layer[first:last] = calm
    layers = {name: getattr(whole, name)[:kept] for name in Fields.LAYERS}
    layers |= {"state": state[:kept], "slope": slope[:kept], "slope_sigma": sigma[:kept], "vtec": vtec[:kept],
               "slope_east": east[:kept], "slope_north": north[:kept]}  # fmt: skip
    layers["support"] = np.full_like(layers["support"], 9)
    fields = replace(whole, times=whole.times[:kept], **layers)
    return survey.advise(Job(SITE.name, ((SITE.lat, SITE.lon),)), fields)


def test_a_day_of_which_a_tenth_is_known_does_not_read_calm(day: DayAdvice) -> None:
    count = len(day.fields.times)
    longest, delay, *_ = report.survey_figures(seen(day, 0, round(0.1 * count)), CLOCK)
    part = f"of the {int(100 * round(0.1 * count) / count)} % of the day that is known: "
    assert longest.startswith(f"Longest baseline within tolerance, {part}")
    assert delay.startswith(f"Differential delay at the job's distance, {part}")
    assert report.survey_figures(seen(day, 0, count), CLOCK)[0].startswith(
        "Longest baseline within tolerance, of the 100 % of the day that is known: "
    )
    almost = int(100 * (count - 1) / count)  # never rounded up to all of it
    assert f"of the {almost} % of the day" in report.survey_figures(seen(day, 0, count - 1), CLOCK)[0]
    times = STORM_DAY.astype("datetime64[ns]") + np.arange(0, 2 * 1440, 5).astype("timedelta64[m]")
    assert report.known_part(np.arange(288) == 7, times[:288]) == "the less than 1 % of the day that is known"
    assert report.known_part(np.arange(576) < 144, times) == "the 25 % of the 2 days that is known"


def test_epochs_that_have_no_map_yet_are_not_known(day: DayAdvice) -> None:
    count = len(day.fields.times)
    assert "of the 25 % of the day that is known" in report.survey_figures(seen(day, 0, count, count // 4), CLOCK)[0]


def test_of_a_day_that_was_never_seen_nothing_is_said(day: DayAdvice) -> None:
    assert report.survey_figures(seen(day, 0, 0), CLOCK) == [
        "Longest baseline within tolerance: not known at any time of the day.",
        "Differential delay at the job's distance: not known at any time of the day.",
    ]


def test_the_sheet_draws_the_states_of_the_site_not_of_its_cell(day: DayAdvice) -> None:
    _, blocks = report.of_site(day, SITE, seen(day, 0, 10))
    rows = dict(next(block for block in blocks if isinstance(block, DayChart)).rows)
    start = STORM_DAY.astype("datetime64[ns]")
    marks = ("unseen", "good", "doubt", "bad")
    codes = day.states_at(SITE)
    assert len(set(codes.tolist())) > 1
    for time, code in zip(day.fields.times, codes, strict=True):
        share = float((time - start) / np.timedelta64(1, "D")) + 1e-6
        assert [mark for a, b, mark in rows["Corrections at the site"] if a <= share < b] == [marks[code]]


def test_the_sheet_has_no_blank_hours(small_archive: Archive) -> None:
    """Of a day that came from six to nine, site and job are unseen before and after."""
    part = DayAdvice(small_archive, small_archive.day(REGION.name, STORM_DAY))
    whole = part.fields
    rows = slice(len(whole.times) // 4, 3 * len(whole.times) // 8)
    part.__dict__["fields"] = replace(
        whole, times=whole.times[rows], **{name: getattr(whole, name)[rows] for name in Fields.LAYERS}
    )
    place = Site("a field", SITE.lat + 0.01, SITE.lon, "job")
    _, blocks = report.of_site(part, place)
    rows_of = dict(next(block for block in blocks if isinstance(block, DayChart)).rows)
    for name in ("Corrections at the site", "Survey"):
        assert {mark for start, end, mark in rows_of[name] if end <= 0.25 or start >= 0.375} == {"unseen"}
        assert sum(end - start for start, end, _ in rows_of[name]) == pytest.approx(1.0)


def test_the_sheet_says_how_much_is_known(day: DayAdvice) -> None:
    _, blocks = report.of_site(day, SITE, seen(day, 0, len(day.fields.times) // 2))
    texts = [getattr(block, "text", "") for block in blocks]
    assert any(text.startswith("Of the 50 % of the day that is known, the delay sloped by 0.7 mm/km") for text in texts)
