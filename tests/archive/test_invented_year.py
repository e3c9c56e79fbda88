"""The invented year is the same each time, says everywhere that it is invented, and its repetition is whole."""

from pathlib import Path

import numpy as np
from tests.invented_year import activity, day_of, days, repeat

from skylag.archive import open_archive
from skylag.tables import Fields


def test_the_course_of_a_year() -> None:
    """Seeded; mostly quiet; storms gather near the equinoxes (days 80 and 263 of the year)."""
    course = activity(365)
    np.testing.assert_array_equal(course, activity(365))
    assert (course != activity(365, seed=1)).any()
    assert 0.6 < np.mean(course < 0.3) < 0.95 and course.max() > 1.0
    year = np.concatenate([activity(365, seed) for seed in range(40)]).reshape(40, 365).mean(axis=0)
    near = np.r_[50:110, 233:293]
    assert year[near].mean() > 1.3 * np.delete(year, near).mean()


def test_a_few_days_and_their_repetition(tmp_path: Path) -> None:
    made = list(days(np.datetime64("2031-01-01"), 3))
    with open_archive(tmp_path) as archive:
        for products in made:
            archive.save(products)
        repeat(archive, 365, count=3)
        heads = archive.days()
        assert [str(head.day) for head in heads] == ["2032-01-03", "2032-01-02", "2032-01-01", "2031-01-03",
                                                     "2031-01-02", "2031-01-01"]  # fmt: skip
        assert all(head.simulated for head in heads)
        name = heads[0].region
        for layer in Fields.LAYERS:
            np.testing.assert_array_equal(
                getattr(archive.fields(name, "2032-01-02"), layer), getattr(made[1].fields, layer)
            )
        assert archive.fields(name, "2032-01-02").times[0] == np.datetime64("2032-01-02T00:00")
        assert archive.check() == ()


def test_a_disturbed_day_shows() -> None:
    quiet, severe = (day_of(np.datetime64("2031-03-20"), 78, level) for level in (0.0, 2.0))
    assert not quiet.flags and severe.flags and all("nvented" in flag.evidence for flag in severe.flags)
    assert np.nanmax(severe.fields.slope) > 3 * np.nanmax(quiet.fields.slope)
    assert (severe.fields.state == 3).mean() > (quiet.fields.state == 3).mean()
    assert quiet.origin.simulated and any("nvented" in text for text in severe.origin.warnings)
