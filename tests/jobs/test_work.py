"""Units of work: sorting inputs, bad files named while the rest goes on, a day from files to products."""

import shutil
from collections.abc import Iterator
from concurrent.futures import Executor, ThreadPoolExecutor
from dataclasses import replace
from datetime import date
from pathlib import Path

import hatanaka
import numpy as np
import pytest
from tests.ionosphere.ray_world import records

from skylag import chain
from skylag.archive import open_archive
from skylag.chain import Choices
from skylag.errors import FormatError, NotEnough
from skylag.ionosphere.geometry import modified_mapping
from skylag.jobs import work
from skylag.settings import Estimation
from skylag.tables import HOLDS, UNSEEN

DAY = "2031-03-11"


@pytest.fixture(scope="module")
def executor() -> Iterator[Executor]:
    with ThreadPoolExecutor(2) as pool:
        yield pool


def files(sample_folder: Path, *markers: str, day: str = DAY) -> list[Path]:
    return [next((sample_folder / day).glob(f"{marker}*")) for marker in markers]


def cut_text(path: Path, share: float) -> bytes:
    text = hatanaka.decompress(path.read_bytes())
    return text[: int(len(text) * share)]


@pytest.fixture(scope="module")
def messy(sample_folder: Path, tmp_path_factory: pytest.TempPathFactory) -> Path:
    """A folder as people bring it: good files, and one of each kind of bad file."""
    folder = tmp_path_factory.mktemp("messy")
    for path in files(sample_folder, "MRGT", "TARN"):
        shutil.copy(path, folder)
    shutil.copy(files(sample_folder, "MRGT")[0], folder / "copy of MRGT.crx.gz")
    shutil.copy(files(sample_folder, "VANP", day="2031-03-12")[0], folder)
    (folder / "letter.rnx").write_text("Dear surveyor,\nthe files follow tomorrow.\n")
    (folder / "empty.31o").write_bytes(b"")
    (folder / "region.toml").write_text("[region]\n")
    kelm = files(sample_folder, "KELM")[0]
    (folder / "KELM00XBS_R_20310700000_01D_30S_MO.rnx").write_bytes(cut_text(kelm, 0.3))
    return folder


@pytest.fixture(scope="module")
def result(messy: Path, executor: Executor) -> work.DayResult:
    return work.network_day([messy], executor=executor)


def test_every_bad_file_is_named_with_its_reason(result: work.DayResult, messy: Path) -> None:
    reasons = {Path(item.path).name: str(item) for item in result.left_out}
    twin = next(name for name in reasons if "MRGT" in name)  # whichever of the two came second
    assert set(reasons) == {twin, "letter.rnx", "empty.31o", "VANP00XBS_R_20310710000_01D_30S_MO.crx.gz"}
    assert "letter.rnx:1:" in reasons["letter.rnx"]
    assert "Dear surveyor" in reasons["letter.rnx"]
    assert "is empty" in reasons["empty.31o"]
    assert "another day (2031-03-12, not 2031-03-11)" in reasons["VANP00XBS_R_20310710000_01D_30S_MO.crx.gz"]
    assert "is the same file as" in reasons[twin]
    assert str(messy) in reasons["empty.31o"]


def test_the_rest_goes_on(result: work.DayResult) -> None:
    """The whole receiver and the part of the one cut short are both in the result, and the cut has its line."""
    names = [receiver.name for receiver in result.products.receivers]
    assert names == ["KELM00XBS", "MRGT00XBS"]
    cut = [problem for problem in result.problems if "KELM" in problem.path]
    assert cut
    assert all(problem.line > 0 for problem in cut)


def test_origin_tells_every_input_and_its_use(result: work.DayResult) -> None:
    inputs = {item["name"]: item for item in result.products.origin.inputs}
    assert inputs["letter.rnx"]["used"] is False
    assert inputs["letter.rnx"]["why_not"]
    used = [item for item in inputs.values() if item["used"]]
    assert all(len(item["sha256"]) == 64 and item["bytes"] > 0 for item in used)
    assert {item["kind"] for item in used} == {"observations", "navigation"}
    stages = {"look", "receivers", "biases", "maps", "slopes", "fronts", "states"}
    assert set(result.products.origin.timings_s) >= stages


def test_few_receivers_say_what_they_cannot_know(result: work.DayResult) -> None:
    said = " ".join(result.products.origin.warnings)
    assert "three receivers" in said
    assert "zero" in said


def test_nothing_holds_where_nobody_looked(result: work.DayResult) -> None:
    fields = result.products.fields
    assert np.all(fields.support[fields.state == HOLDS] > 0)


def test_one_receiver_alone_works_and_says_so(sample_folder: Path, executor: Executor) -> None:
    made = work.network_day(files(sample_folder, "MRGT", "TARN"), executor=executor)
    assert not made.left_out
    assert any("One receiver alone (MRGT00XBS)" in warning for warning in made.products.origin.warnings)
    assert 0.2 < np.mean(made.products.fields.state == UNSEEN) < 0.95
    assert not [flag for flag in made.products.flags if flag.kind in ("front", "irregular") and flag.confirmed]


# ---------------------------------------------------------------------------------------------- choices of biases


def test_choices_reach_the_day_and_earlier_biases_come_from_the_archive(
    sample_folder: Path, tmp_path: Path, executor: Executor
) -> None:
    """The first day is kept; the second draws upon its biases, with every other choice of the estimation made too."""
    hourly = Choices(epoch_step_s=3600.0)
    asked = Estimation(mapping="modified", shell_height_km=450.0, earlier_days=3, drift_hours=6.0, repair_slips=True)
    with open_archive(tmp_path) as archive:
        first = work.network_day(files(sample_folder, "MRGT", "TARN"), executor=executor, choices=hourly)
        archive.save(first.products)
        second = work.network_day(
            files(sample_folder, "MRGT", "TARN", day="2031-03-12"), executor=executor, choices=asked.choices(hourly),
            earlier=work.earlier_biases(archive, 3),
        )  # fmt: skip
        name = first.products.region.name
        ask = work.earlier_biases(archive, 3)
        assert ask(name, np.datetime64("2031-03-11")) is None, "not of the day itself"
        assert ask(name, np.datetime64("2031-03-15")) is None, "four days back"
        assert ask("Elsewhere", np.datetime64("2031-03-12")) is None
        found = ask(name, np.datetime64("2031-03-14"))
        assert found is not None and found.source == "network day 2031-03-11"
    calibration, rays = second.products.calibration, second.products.samples.rays
    drawn = "mean of 24 satellites as in network day 2031-03-11"
    words = sorted(set(calibration.datum_of_row))
    assert [one.split(" to ")[0] for one in words[:4]] == ["00:00", "06:00", "12:00", "18:00"]
    assert all(one.endswith(f": {drawn}") for one in words[:4]) and words[4:] == [drawn]
    assert rays.shell_height_m == 450e3 and second.products.region.shell_height_km == 450.0
    assert rays.mapping == pytest.approx(modified_mapping(rays.elevation))
    assert abs(calibration.summary["high_layer_amplitude"]) < 0.01
    assert calibration.biases.kind.tolist().count("receiver") == 4 * 2, "four spans of six hours, two constellations"
    options = second.products.origin.options
    assert (options["mapping_function"], options["earlier_days"]) == ("modified single layer", 3)
    assert options["arcs"]["repair"] and options["adjustment"]["drift_hours"] == 6.0
    # Of the same satellites: what was drawn upon is not copied, nor far from what the day itself says.
    of_satellite = calibration.biases.kind == "satellite"
    before = dict(zip(first.products.calibration.biases.name, first.products.calibration.biases.value_ns, strict=True))
    moved = np.array([v - before[n] for n, v in zip(
        calibration.biases.name[of_satellite], calibration.biases.value_ns[of_satellite], strict=True)])  # fmt: skip
    assert 0.0 < np.std(moved) < 0.3


def test_where_no_earlier_day_is_kept_it_is_said(sample_folder: Path, executor: Executor) -> None:
    made = work.network_day(
        files(sample_folder, "MRGT", "TARN"), executor=executor, earlier=lambda region, day: None,
        choices=Estimation(earlier_days=7).choices(Choices(epoch_step_s=3600.0)),
    )  # fmt: skip
    assert any("within 7 days before is kept" in warning for warning in made.products.origin.warnings)
    assert all("zero mean" in words for words in made.products.calibration.datum_of_row)


@pytest.mark.parametrize(
    ("word", "used", "walk", "said"),
    [("hold", "files", None, "network day 2031-03-10 are not drawn upon"), ("draw", "files", 0.2, "not drawn upon"),
     ("ignore", "network day 2031-03-10", 0.2, "not used, as asked for: files")],
)  # fmt: skip
def test_files_come_before_earlier_days(word: str, used: str, walk: float | None, said: str) -> None:
    choices = Estimation(published_biases=word, bias_walk_ns_per_day=0.2).choices()
    published = earlier = records("satellite", ["G01"], "G", "C1W", "C2W", [1.0])
    prior, adjustment, notes = chain.known_biases(
        choices, replace(published, source="files"), replace(earlier, source="network day 2031-03-10")
    )
    assert prior is not None and prior.source == used
    assert adjustment.prior_walk_ns_per_day == walk
    assert said in " ".join(notes)
    assert chain.known_biases(choices, None, None)[0] is None


BIASES = """%=BIA 1.00 XYZ 2031:074:00000 XYZ 2031:{first}:00000 2031:{last}:00000 R 00000003
*-------------------------------------------------------------------------------
+BIAS/SOLUTION
*BIAS SVN_ PRN STATION__ OBS1 OBS2 BIAS_START____ BIAS_END______ UNIT __ESTIMATED_VALUE____ _STD_DEV___
 DSB  G063 G01           C1W  C2W  2031:{first}:00000 2031:{last}:00000 ns                 -7.5000      0.0100
-BIAS/SOLUTION
%=ENDBIA
"""


def test_biases_of_another_day_are_told_not_called_used(
    sample_folder: Path, tmp_path: Path, executor: Executor
) -> None:
    """Day 070 is that of the files.  Where a file of the day is there too, the others are only marked."""
    for first, last in (("110", "111"), ("200", "201")):
        (tmp_path / f"{first}.BIA").write_text(BIASES.format(first=first, last=last))
    paths = [*files(sample_folder, "MRGT", "TARN"), tmp_path]
    choices = Choices(epoch_step_s=3600.0)
    made = work.network_day(paths, executor=executor, choices=choices)
    why = {Path(item.path).name: item.reason for item in made.left_out}
    assert "are of 2031-04-20, not of 2031-03-11" in why["110.BIA"] and "draw draws upon them" in why["110.BIA"]
    assert "draw draws upon them" not in why["200.BIA"], "too far for that"
    assert all("zero mean" in words for words in made.products.calibration.datum_of_row)
    used = {one["name"]: one["used"] for one in made.products.origin.inputs}
    assert not used["110.BIA"] and not used["200.BIA"]

    _, _, left_out, others = work.read_biases([str(p) for p in sorted(tmp_path.iterdir())], np.datetime64(DAY), 60.0)
    assert not left_out and [Path(one.path).name for one in others] == ["200.BIA"]
    assert "more than 60 days" in others[0].reason


def test_pieces_under_short_names(sample_folder: Path, tmp_path: Path, executor: Executor) -> None:
    """Short names, pieces of a day, and plain text: what counts is inside."""
    whole = hatanaka.decompress(files(sample_folder, "MRGT")[0].read_bytes())
    head, rest = whole.split(b"END OF HEADER", 1)
    epochs = rest.split(b"\n> ")
    start = head + b"END OF HEADER" + epochs[0] + b"\n> "
    half = len(epochs) // 2
    (tmp_path / "mrgt070a.31o").write_bytes(start + b"\n> ".join(epochs[1:half]) + b"\n")
    (tmp_path / "mrgt070m.31o").write_bytes(start + b"\n> ".join(epochs[half - 5 :]))
    shutil.copy(files(sample_folder, "TARN")[0], tmp_path / "nav.gz")
    shutil.copy(files(sample_folder, "VANP", day="2031-03-12")[0], tmp_path)
    made = work.network_day([tmp_path], day=date(2031, 3, 11), executor=executor)
    (facts,) = made.products.origin.counts["by_receiver"]
    assert facts["receiver"] == "MRGT00XBS"
    assert facts["epochs"] == 2880


def test_without_orbits_there_is_no_result(sample_folder: Path, executor: Executor) -> None:
    with pytest.raises(NotEnough, match="no usable navigation or SP3 file"):
        work.network_day(files(sample_folder, "MRGT"), executor=executor)


def test_orbits_of_another_day_leave_the_receiver_out(sample_folder: Path, executor: Executor) -> None:
    paths = [*files(sample_folder, "MRGT"), *files(sample_folder, "TARN", day="2031-03-13")]
    with pytest.raises(NotEnough, match=r"no arc .* with known\s+orbits") as caught:
        work.network_day(paths, executor=executor)
    assert "MRGT00XBS" in str(caught.value)


def test_no_observation_at_all(messy: Path, executor: Executor) -> None:
    with pytest.raises(NotEnough, match="no observation file") as caught:
        work.network_day([messy / "letter.rnx"], executor=executor)
    assert "letter.rnx" in str(caught.value)


def test_a_path_that_is_not_there(tmp_path: Path, executor: Executor) -> None:
    with pytest.raises(FormatError, match="no such file or folder"):
        work.network_day([tmp_path / "nowhere"], executor=executor)


def test_a_day_none_of_the_files_is_of(sample_folder: Path, executor: Executor) -> None:
    with pytest.raises(NotEnough, match="no receiver of 2031-03-14 can be used") as caught:
        work.network_day(files(sample_folder, "MRGT", "TARN"), day=date(2031, 3, 14), executor=executor)
    assert "another day" in str(caught.value)


@pytest.mark.parametrize(
    ("name", "key"),
    [
        ("ESBC00DNK_R_20201770000_01D_30S_MO.crx.gz", "ESBC00DNK"),
        ("delf0010.21d.gz", "DELF"),
        ("ZIMM2350.15O.gz", "ZIMM"),
        ("mrgt070a.31o", "MRGT"),
        ("mrgt070a15.31o", "MRGT"),
        ("whatever.txt", "whatever.txt"),
    ],
)
def test_the_receiver_is_told_by_the_name(name: str, key: str) -> None:
    assert work._station_key(Path(name)) == key


def test_invented_data_are_marked_by_their_own_headers(result: work.DayResult) -> None:
    assert result.products.origin.simulated
