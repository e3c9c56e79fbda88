"""Tables refuse what does not fit together, and say which rule was broken."""

from dataclasses import fields, replace
from typing import Any

import numpy as np
import pytest

from skylag.errors import Refused
from skylag.tables import Arcs, Biases, Observations, Receiver, Region, SignalPair, Signals, Thresholds

RECEIVER = Receiver("ARDN00XBS", (-4052052.0, 2618000.0, -3884000.0))
TIMES = np.array(["2031-03-12T00:00", "2031-03-12T00:01", "2031-03-12T00:02"], dtype="datetime64[ns]")


def signals(**changes: Any) -> Signals:
    whole: dict[str, Any] = {
        "receiver": RECEIVER, "times": TIMES, "satellites": np.array(["G01", "G02"]),
        "values": {"C1C": np.ones((3, 2))}, "lock": {"L1C": np.zeros((3, 2), dtype=np.uint8)}, "channels": {},
        "resets": np.zeros(3, dtype=bool), "interval_s": 60.0,
    }  # fmt: skip
    return Signals(**(whole | changes))


def observations() -> Observations:
    values = {name: np.ones((3, 2)) for name in ("code1", "code2", "phase1", "phase2", "snr1")}
    locks = {name: np.zeros((3, 2), dtype=np.uint8) for name in ("lock1", "lock2")}
    return Observations(
        receiver=RECEIVER, times=TIMES, satellites=np.array(["G01", "G02"]),
        pairs={"G": SignalPair("G", "C1C", "C2W", "L1C", "L2W")}, f1_hz=np.full(2, 1575.42e6),
        f2_hz=np.full(2, 1227.6e6), resets=np.zeros(3, dtype=bool), interval_s=60.0, **values, **locks,
    )  # fmt: skip


def test_whole_tables_stand() -> None:
    assert signals().receiver is RECEIVER
    assert observations().pairs["G"].name == "C1C-C2W"


@pytest.mark.parametrize(
    ("changes", "rule"),
    [
        ({"values": {"C1C": np.ones((2, 2))}}, "Signals: each signal must have the shape (3, 2) (epochs, satellites)"),
        ({"lock": {"L1C": np.zeros((3, 1), dtype=np.uint8)}}, "each signal must have the shape (3, 2)"),
        ({"resets": np.zeros(2, dtype=bool)}, "Signals: resets must have one value per epoch"),
        ({"times": TIMES[[0, 0, 1]]}, "Signals: times must strictly increase"),
        ({"times": TIMES[[0, 2, 1]]}, "Signals: times must strictly increase"),
    ],
)
def test_signals_refused(changes: dict[str, Any], rule: str) -> None:
    with pytest.raises(Refused) as refused:
        signals(**changes)
    assert rule in str(refused.value)


@pytest.mark.parametrize("name", ["code1", "code2", "phase1", "phase2", "snr1", "lock1", "lock2"])
def test_observations_of_another_shape(name: str) -> None:
    with pytest.raises(Refused, match=rf"Observations: {name} must have the shape \(3, 2\)"):
        replace(observations(), **{name: getattr(observations(), name)[:2]})


def test_frequencies_per_satellite() -> None:
    with pytest.raises(Refused, match="one frequency per satellite"):
        replace(observations(), f1_hz=np.full(3, 1575.42e6))


def arcs(**changes: Any) -> Arcs:
    whole: dict[str, Any] = {
        "observations": observations(), "stec": np.zeros((3, 2)), "stec_phase": np.zeros((3, 2)),
        "arc": np.zeros((3, 2), dtype=np.int64), "arc_satellite": np.array([0]), "arc_start": np.array([0]),
        "arc_end": np.array([2]), "arc_began": np.zeros(1, dtype=np.uint8), "arc_level_sigma": np.ones(1),
        "arc_noise": np.ones(1), "arc_points": np.array([3]), "rejected": {},
    }  # fmt: skip
    return Arcs(**(whole | changes))


def test_arcs_refused() -> None:
    assert arcs().slips == ()
    with pytest.raises(Refused, match=r"arrays must have the shape \(3, 2\)"):
        arcs(stec=np.zeros((3, 1)))
    with pytest.raises(Refused, match="columns must be of one length"):
        arcs(arc_start=np.array([0, 1]))


def test_biases_of_unequal_columns() -> None:
    column: dict[str, Any] = {"kind": np.array(["satellite"]), "name": np.array(["G01"]), "system": np.array(["G"]),
                              "code1": np.array(["C1W"]), "code2": np.array(["C2W"]), "value_ns": np.array([1.0]),
                              "sigma_ns": np.array([0.1]), "start": TIMES[:1], "end": TIMES[:1]}  # fmt: skip
    assert len(Biases(**column)) == 1
    for name in column:
        with pytest.raises(Refused, match="columns must be of one length"):
            Biases(**(column | {name: np.concatenate([column[name], column[name]])}))


@pytest.mark.parametrize(
    ("changes", "rule"),
    [
        ({"south": 10.0, "north": 10.0}, "south must be below north"),
        ({"south": -91.0}, "both within -90 and 90"),
        ({"west": 20.0, "east": 10.0}, "west must be below east"),
        ({"step_deg": 0.05}, "step_deg must be from 0.1 to 5"),
        ({"shell_height_km": 50.0}, "shell_height_km must be from 100 to 1000"),
    ],
)
def test_regions_refused(changes: dict[str, float], rule: str) -> None:
    whole: dict[str, Any] = {"name": "Trial", "south": -43.5, "north": -36.5, "west": 142.0, "east": 150.0}
    with pytest.raises(Refused) as refused:
        Region(**(whole | changes))
    assert rule in str(refused.value)


def test_the_grid_reaches_both_edges() -> None:
    region = Region("Trial", -43.5, -36.5, 142.0, 150.0, step_deg=0.5)
    assert (region.lats[0], region.lats[-1], len(region.lats)) == (-43.5, -36.5, 15)
    assert (region.lons[0], region.lons[-1], len(region.lons)) == (142.0, 150.0, 17)
    across = Region("Date line", -10.0, 10.0, 170.0, 190.0)
    assert across.lons[-1] == 190.0


def test_nouns_cannot_be_changed() -> None:
    """What one stage hands on, the next cannot alter."""
    with pytest.raises(AttributeError):
        Thresholds().strained_mm_per_km = 1.0  # type: ignore[misc]
    assert all(field.init for field in fields(Observations))
