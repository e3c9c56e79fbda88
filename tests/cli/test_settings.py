"""Region files and the environment."""

import argparse
from pathlib import Path

import pytest

from skylag import settings
from skylag.chain import Choices
from skylag.errors import FormatError, Refused

GOOD = """
[region]
name = "Anywhere"
south = -40
north = -38.0
west = 144.0
east = 147.0
step_deg = 0.25
shell_height_km = 350

[[site]]
name = "Field"
lat = -39.0
lon = 145.0
kind = "aerodrome"

[thresholds]
broken_mm_per_km = 50

[[use]]
name = "Pipeline survey"
kind = "differential"
baseline_km = 25
spare_mm = 40
"""


def write(folder: Path, text: str) -> Path:
    path = folder / "region.toml"
    path.write_text(text, encoding="utf-8")
    return path


def test_a_region_is_read(tmp_path: Path) -> None:
    region = settings.read_region(write(tmp_path, GOOD))
    assert (region.south, region.north, region.step_deg, region.shell_height_km) == (-40.0, -38.0, 0.25, 350.0)
    assert len(region.lats) == 9
    assert len(region.lons) == 13
    assert region.sites[0].kind == "aerodrome"
    assert region.thresholds.broken_mm_per_km == 50.0
    assert region.thresholds.strained_mm_per_km == 8.0
    assert [(use.name, use.kind, use.baseline_km, use.spare_mm) for use in region.uses] == [
        ("Pipeline survey", "differential", 25.0, 40.0)
    ]


@pytest.mark.parametrize(
    ("limits", "said"),
    [("strained_mm_per_km = 60", "broken_mm_per_km is 50"), ("unseen_sigma_m = inf", "unseen_sigma_m is inf"),
     ("strained_roti = 0", "strained_roti is 0"), ("broken_roti = 0.4", "0.5 or more as strained begins there"),
     ("unseen_sigma_m = nan", "unseen_sigma_m is nan"), ("strained_mm_per_km = -1", "a number above 0")],
)  # fmt: skip
def test_limits_that_are_none_are_refused(tmp_path: Path, limits: str, said: str) -> None:
    """Such limits would call everything good, or nothing, without a word."""
    text = GOOD.replace("broken_mm_per_km = 50", f"broken_mm_per_km = 50\n{limits}")
    with pytest.raises(Refused, match=said):
        settings.read_region(write(tmp_path, text))


@pytest.mark.parametrize(
    ("old", "new", "kind", "said"),
    [
        ("[region]", "[realm]", FormatError, "no \\[region\\] table"),
        ("south = -40", "", Refused, "lacks south"),
        ("south = -40", 'south = "low"', Refused, "must be a number"),
        ("south = -40", "south = -30", Refused, "south must be below north"),
        ("step_deg = 0.25", "step_deg = 0.01", Refused, "step_deg must be from 0.1 to 5"),
        ("step_deg = 0.25", "step = 0.25", Refused, "knows nothing of step"),
        ("lat = -39.0", "", Refused, "lacks lat"),
        ("lat = -39.0", "lat = -139.0", Refused, "latitude is -90 to 90"),
        ("broken_mm_per_km", "broken_mm", Refused, "knows nothing of broken_mm"),
        ('name = "Field"', "name = Field", FormatError, "is no TOML"),
        ("spare_mm = 40", "spare = 40", Refused, "\\[\\[use\\]\\] knows nothing of spare"),
        ("spare_mm = 40", 'spare_mm = "some"', Refused, "must be a number"),
        ('kind = "differential"', "", Refused, "\\[\\[use\\]\\] lacks kind"),
        ('kind = "differential"', 'kind = "sextant"', Refused, "kind must be one of differential, ground"),
        ("baseline_km = 25", "baseline_km = 0", Refused, "baseline_km must be from"),
    ],
)
def test_a_wrong_region_is_explained(
    tmp_path: Path, old: str, new: str, kind: type[Exception], said: str
) -> None:
    with pytest.raises(kind, match=said):
        settings.read_region(write(tmp_path, GOOD.replace(old, new)))


def test_the_environment_sets_a_service() -> None:
    given = settings.from_environment({"SKYLAG_PORT": "9000", "SKYLAG_ARCHIVE": "/data", "OTHER": "x"})
    assert given == settings.Settings(archive="/data", port=9000)
    assert settings.from_environment({}) == settings.Settings()
    with pytest.raises(Refused, match="not a port"):
        settings.from_environment({"SKYLAG_PORT": "70000"})


def test_the_sample_region_is_read(sample_folder: Path) -> None:
    region = settings.read_region(sample_folder / "region.toml")
    assert len(region.sites) >= 5
    assert all(region.south < site.lat < region.north and region.west < site.lon < region.east for site in region.sites)


# ---------------------------------------------------------------------------------------------- how biases are found


def command(*words: str) -> argparse.Namespace:
    parser = argparse.ArgumentParser()
    settings.add_estimation(parser)
    return parser.parse_args(words)


def test_command_line_wins_over_the_region_file_wins_over_the_usual(tmp_path: Path) -> None:
    path = write(tmp_path, GOOD + '[estimation]\nmapping = "modified"\ndrift_hours = 3\nrepair_slips = true\n')
    assert settings.read_region(path).shell_height_km == 350.0, "the table does not disturb the region"
    found = settings.estimation_from(command("--drift-hours", "6", "--no-repair-slips"), path)
    assert found == settings.Estimation(mapping="modified", drift_hours=6.0)
    assert settings.estimation_from(command(), None) == settings.Estimation()
    assert settings.estimation_from(command(), write(tmp_path, GOOD)) == settings.Estimation()
    assert settings.Estimation().choices() == Choices()


def test_choices_say_what_was_asked_for() -> None:
    made = settings.estimation_from(command(
        "--mapping", "modified", "--shell-height-km", "500", "--published-biases", "draw", "--earlier-days", "5",
        "--bias-walk-ns-per-day", "0.3", "--drift-hours", "2", "--repair-slips",
        "--background", "climatological", "--solar-flux", "140"), None).choices()  # fmt: skip
    assert (made.mapping_function, made.shell_height_km) == ("modified single layer", 500.0)
    assert (made.published_biases, made.earlier_days, made.bias_walk_ns_per_day) == ("draw", 5, 0.3)
    assert made.adjustment.drift_hours == 2.0 and made.arcs.repair
    assert (made.background, made.solar_flux) == ("climatological", 140.0)
    assert made.adjustment.high_layer == 0.0, "this mapping has a plasmasphere in it"


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("shell_height_km = 50", r"shell_height_km: 50; it may be 100 to 1000, or 0"),
        ("drift_hours = 0.5", "1 to 24, or 0"),
        ("drift_hours = nan", "1 to 24, or 0"),
        ("bias_walk_ns_per_day = 0", "0.01 to 5"),
        ("earlier_days = 2.5", "a whole number of days"),
        ('earlier_days = "many"', "a number"),
        ('mapping = "cosine"', "single or modified"),
        ('published_biases = "believe"', "hold or draw or ignore"),
        ("repair_slips = 1", "true or false"),
        ('background = "none"', "broadcast or climatological"),
        ("solar_flux = 20", "60 to 300, or 0"),
        ("height = 3", "knows nothing of height"),
    ],
)
def test_estimation_out_of_range_is_refused_with_what_is_allowed(text: str, said: str, tmp_path: Path) -> None:
    path = write(tmp_path, f"{GOOD}\n[estimation]\n{text}\n")
    with pytest.raises(Refused, match=said) as refused:
        settings.read_estimation(path)
    assert str(path) in refused.value.message
