"""The command `compare` over a kept day and a folder of results, with good and bad files."""

import gzip
import json
from dataclasses import replace
from pathlib import Path

import numpy as np
import pytest
import xarray as xr
from tests.builders import CALM_DAY, write_archive

from skylag import cli
from skylag.archive import open_archive
from skylag.formats import ionex, netcdf


@pytest.fixture(scope="module")
def archive(tmp_path_factory: pytest.TempPathFactory) -> str:
    return str(write_archive(tmp_path_factory.mktemp("kept")))


@pytest.fixture(scope="module")
def published(archive: str, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A file like a published map of the calm day: ours, two TECU higher."""
    with open_archive(archive) as kept:
        fields = kept.fields(kept.regions()[0], str(CALM_DAY))
    every = {name: getattr(fields, name)[::3] for name in fields.LAYERS}
    higher = replace(fields, times=fields.times[::3], **every)
    path = tmp_path_factory.mktemp("map") / "made.31i.gz"
    text = ionex.write(replace(higher, vtec=higher.vtec + np.float32(2.0)), fields.times[0], 400.0)
    path.write_bytes(gzip.compress(text.encode()))
    return path


def test_a_kept_day_beside_a_map(archive: str, published: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert cli.main(["compare", str(published), "--archive", archive]) == 0
    said = capsys.readouterr().out
    assert "mean -" in said and "RMS" in said and "Invented data" in said
    assert cli.main(["compare", str(published), "--archive", archive, "--format", "json"]) == 0
    facts = json.loads(capsys.readouterr().out)
    assert facts["mean_tecu"] == pytest.approx(-2.0, abs=0.15)  # latitudes are counted otherwise by up to 0.19 deg
    assert facts["cells"] == sum(hour["cells"] for hour in facts["hours"])
    assert cli.main(["compare", str(published), "--archive", archive, "--format", "csv"]) == 0
    lines = capsys.readouterr().out.splitlines()
    assert lines[0] == "hour_utc,cells,mean_tecu,rms_tecu" and len(lines) == 1 + len(facts["hours"])


def test_a_folder_of_results_beside_a_map(
    archive: str, published: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    with open_archive(archive) as kept:
        name = kept.regions()[0]
        netcdf.write(kept.fields(name, str(CALM_DAY)), kept.day(name, str(CALM_DAY)).region, tmp_path / "field.nc",
                     simulated=True)  # fmt: skip
    out = tmp_path / "difference.nc"
    asked = ["compare", str(published), "--results", str(tmp_path)]
    assert cli.main([*asked, "--format", "netcdf", "--out", str(out)]) == 0
    with xr.open_dataset(out, engine="h5netcdf") as held:
        assert float(held["difference"].mean()) == pytest.approx(-2.0, abs=0.15)
        assert held["difference_sigma"].min() > 0 and held.attrs["Conventions"].startswith("CF")
    assert "Invented data" in capsys.readouterr().out
    (tmp_path / "biases.csv").write_text("kind,name\nreceiver,ARDN\n")
    assert cli.main(asked) == 3
    assert "is not a biases.csv" in capsys.readouterr().err
    (tmp_path / "biases.csv").unlink()
    (tmp_path / "field.nc").write_bytes(b"no such thing")
    assert cli.main(asked) == 3
    assert "is not a field.nc" in capsys.readouterr().err


def test_what_cannot_be_compared_is_said(
    archive: str, published: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    def refused(*words: str) -> str:
        assert cli.main(["compare", *words]) == 3
        return capsys.readouterr().err

    assert "cannot be opened" in refused(str(tmp_path / "absent.i"), "--archive", archive)
    table = tmp_path / "P1.DCB"
    table.write_text("DCB SOLUTION, YEAR 2015, MONTH 08\n\n\nDIFFERENTIAL (P1-C1) CODE BIASES\n\n"
                     "***\nG01                         -1.000      0.010\n")  # fmt: skip
    assert "a map of content is needed" in refused(str(table), "--archive", archive)
    cut = tmp_path / "cut.i.gz"
    cut.write_bytes(published.read_bytes()[:-2000])
    assert cli.main(["compare", str(cut), "--archive", archive]) == 1  # the maps before the cut are compared
    assert "noticed:" in capsys.readouterr().err
    assert "2001-01-01 is not kept here" in refused(str(published), "--archive", archive, "--day", "2001-01-01")
    assert "holds no field.nc" in refused(str(published), "--results", str(tmp_path))
    assert "--out FILE" in refused(str(published), "--archive", archive, "--format", "netcdf")
