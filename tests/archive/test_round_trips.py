"""What goes into the archive comes out, whatever it is."""

from dataclasses import replace
from pathlib import Path

import numpy as np
from hypothesis import HealthCheck, given, settings
from hypothesis import strategies as st
from hypothesis.extra import numpy as arrays
from tests.builders import REGION, STORM_DAY, invented_day, one_site_less

from skylag.archive import chunks, open_archive
from skylag.archive.records import from_text, to_text
from skylag.tables import FLAG_KINDS, STATE_NAMES, Flag

NUMBERS = st.sampled_from(["<f4", ">f4", "<f8", "<u2", "|u1", "<i8", ">i2", "|i1"])
INSTANTS = st.integers(0, 2**62).map(lambda ns: np.datetime64(ns, "ns"))
# PostgreSQL keeps no zero character in text; nor does anyone write one.
TEXT = st.text(st.characters(exclude_characters="\x00", exclude_categories=["Cs"]), max_size=40)
# Plus nought: SQLite does not keep the sign of zero, and none of these numbers means anything by it.
FLOATS = st.floats(allow_infinity=False).map(lambda value: value + 0.0)
PLACES = st.floats(-180, 180).map(lambda value: value + 0.0)
FLAGS = st.builds(
    Flag, start=INSTANTS, end=INSTANTS, lat=PLACES, lon=PLACES, kind=st.sampled_from(FLAG_KINDS),
    slope_mm_per_km=FLOATS, sigma_mm_per_km=FLOATS, speed_m_s=FLOATS, heading_deg=FLOATS,
    state=st.sampled_from(STATE_NAMES), evidence=TEXT,
    confirmed=st.booleans(), track=st.lists(st.tuples(INSTANTS, PLACES, PLACES), max_size=3).map(tuple),
)  # fmt: skip


@given(arrays.arrays(NUMBERS, arrays.array_shapes(min_dims=0, max_dims=4, min_side=0, max_side=6)))
def test_any_array(array: np.ndarray) -> None:
    got = chunks.unpack(chunks.pack(array, "label"), "label")
    assert got.shape == array.shape
    assert got.tobytes() == array.astype(array.dtype.newbyteorder("=")).tobytes(), "to the bit, not-a-number included"


@settings(max_examples=15, deadline=None, suppress_health_check=[HealthCheck.function_scoped_fixture])
@given(flags=st.lists(FLAGS, max_size=6).map(tuple))
def test_any_flags(tmp_path: Path, flags: tuple[Flag, ...]) -> None:
    small = one_site_less(invented_day(step_minutes=240, satellites=1))
    with open_archive(tmp_path / "a.sqlite") as archive:
        version = archive.save(replace(small, flags=flags))
        got = archive.flags(REGION.name, STORM_DAY, version)
    assert [repr(flag) for flag in got] == [repr(flag) for flag in flags]


@given(st.recursive(st.none() | st.booleans() | st.integers() | FLOATS.filter(np.isfinite) | TEXT,
                    lambda inner: st.lists(inner, max_size=4) | st.dictionaries(TEXT, inner, max_size=4)))  # fmt: skip
def test_any_facts(facts: object) -> None:
    assert from_text(to_text(facts)) == facts


def test_facts_of_numpy_and_paths() -> None:
    facts = {"n": np.int64(3), "x": np.float32(0.5), "t": np.datetime64("2031-05-11T05"), "p": Path("a/b"),
             "list": np.arange(3), "set": {"b", "a"}, "span": np.timedelta64(5, "m"),
             "yes": np.bool_(True)}  # fmt: skip
    assert from_text(to_text(facts)) == {
        "n": 3, "x": 0.5, "t": "2031-05-11T05", "p": "a/b", "list": [0, 1, 2], "set": ["a", "b"], "span": "5 minutes",
        "yes": True,
    }  # fmt: skip
