"""Region files and the environment."""

from pathlib import Path

import pytest

from skylag import settings
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
