"""Files that were read before are given as they were, to the bit; what is damaged or changed is read again."""

from pathlib import Path

import hatanaka
import numpy as np
import pytest

from skylag import formats
from skylag.errors import FormatError
from skylag.ionosphere.pairs import wanted_codes
from skylag.jobs import kept
from skylag.jobs.kept import ReadOnce
from skylag.tables import Reading, Signals

WANTED = wanted_codes()


@pytest.fixture
def hour(sample_folder: Path, tmp_path: Path) -> Path:
    """An hour of a receiver, with a line that is broken."""
    text = hatanaka.decompress(next((sample_folder / "2031-03-11").glob("FENN*")).read_bytes())
    head, rest = text.split(b"END OF HEADER", 1)
    epochs = rest.split(b"\n> ")
    epochs[20] = epochs[20].replace(b"G", b"?", 1)
    path = tmp_path / "FENN00XBS_R_20310700000_01H_30S_MO.rnx"
    path.write_bytes(head + b"END OF HEADER" + b"\n> ".join(epochs[:121]) + b"\n")
    return path


@pytest.fixture
def reads(monkeypatch: pytest.MonkeyPatch) -> list[str]:
    """The files that are truly read."""
    real, told = formats.read, []

    def read(path: Path, **named: object) -> Reading:
        told.append(Path(path).name)
        return real(path, **named)  # type: ignore[arg-type]

    monkeypatch.setattr(formats, "read", read)
    return told


def assert_same(one: Reading, other: Reading) -> None:
    a, b = one.table, other.table
    assert isinstance(a, Signals) and isinstance(b, Signals)
    assert (a.receiver, a.channels, a.interval_s) == (b.receiver, b.channels, b.interval_s)
    assert one.problems == other.problems
    for name in ("times", "satellites", "resets"):
        np.testing.assert_array_equal(getattr(a, name), getattr(b, name))
    for name in ("values", "lock"):
        there, here = getattr(a, name), getattr(b, name)
        assert list(there) == list(here)
        for code in there:
            np.testing.assert_array_equal(there[code], here[code])
            assert there[code].dtype == here[code].dtype


def test_a_file_is_read_once_and_comes_back_to_the_bit(hour: Path, tmp_path: Path, reads: list[str]) -> None:
    once = ReadOnce(tmp_path / "kept")
    first = once(hour, wanted=WANTED, thin_to_s=None)
    again = once(hour, wanted=WANTED, thin_to_s=None)
    assert len(reads) == 1 and first.problems
    assert_same(first, again)


def test_other_content_codes_or_spacing_are_read_anew(hour: Path, tmp_path: Path, reads: list[str]) -> None:
    once = ReadOnce(tmp_path / "kept")
    once(hour, wanted=WANTED, thin_to_s=None)
    thinned = once(hour, wanted=WANTED, thin_to_s=60.0)
    assert isinstance(thinned.table, Signals) and thinned.table.interval_s == 60.0
    once(hour, wanted={"G": {"C1C"}}, thin_to_s=None)
    hour.write_bytes(hour.read_bytes() + b" \n")
    once(hour, wanted=WANTED, thin_to_s=None)
    assert len(reads) == 4


def test_what_is_damaged_is_read_again(hour: Path, tmp_path: Path, reads: list[str]) -> None:
    once = ReadOnce(tmp_path / "kept")
    first = once(hour, wanted=WANTED, thin_to_s=None)
    (there,) = (tmp_path / "kept").rglob("*.npz")
    there.write_bytes(there.read_bytes()[:-200])
    assert_same(first, once(hour, wanted=WANTED, thin_to_s=None))
    assert len(reads) == 2


def test_a_folder_that_takes_nothing_costs_only_time(hour: Path, tmp_path: Path) -> None:
    (tmp_path / "kept").write_text("a file where the folder should be")
    once = ReadOnce(tmp_path / "kept")
    assert_same(once(hour, wanted=WANTED, thin_to_s=None), formats.read(hour, wanted=WANTED))


def test_what_cannot_be_read_is_said_as_ever(tmp_path: Path) -> None:
    (tmp_path / "letter.rnx").write_text("Dear surveyor,\n")
    once = ReadOnce(tmp_path / "kept")
    for name in ("letter.rnx", "nowhere.rnx"):
        with pytest.raises(FormatError, match=name):
            once(tmp_path / name, wanted=WANTED, thin_to_s=None)
    assert kept.tidy(tmp_path / "kept", 0.0, 2.0**40) == 0, "nothing was kept"
