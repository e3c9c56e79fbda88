"""The modified single layer: its published form, and the choice in `place`."""

import numpy as np
import pytest
from tests.conftest import Evidence

from invented import network
from skylag.errors import Refused
from skylag.ionosphere import geometry
from skylag.ionosphere.arcs import cut
from skylag.ionosphere.pairs import choose
from skylag.tables import Arcs


@pytest.mark.parametrize("elevation, expected", [(10.0, 2.373784798), (30.0, 1.636004311), (60.0, 1.122317348)])
def test_published_form(elevation: float, expected: float, evidence: Evidence) -> None:
    """Values worked out by hand from the published form."""
    evidence(f"modified single layer mapping at {elevation:g} deg",
             source="Schaer 1999: sin z' = R / (R + 506.7 km) sin(0.9782 z); constants from memory",
             expected=expected, got=float(geometry.modified_mapping(elevation)), tolerance=1e-8)  # fmt: skip


def test_grows_downward_from_one() -> None:
    elevation = np.linspace(5.0, 90.0, 200)
    factor = geometry.modified_mapping(elevation)
    assert factor[-1] == pytest.approx(1.0)
    assert np.all(np.diff(factor) < 0)
    assert np.all(factor[:-1] < geometry.mapping(elevation[:-1], 400e3))


def test_place_takes_the_mapping_asked_for(one_arc: tuple[Arcs, np.ndarray]) -> None:
    arcs, positions = one_arc
    single = geometry.place(arcs, positions, 400e3)
    modified = geometry.place(arcs, positions, 400e3, mapping_function=geometry.MODIFIED_SINGLE_LAYER)
    assert single.mapping == pytest.approx(geometry.mapping(single.elevation, 400e3))
    assert modified.mapping == pytest.approx(geometry.modified_mapping(single.elevation))
    assert modified.pierce_lat == pytest.approx(single.pierce_lat)
    with pytest.raises(Refused, match="'cosine' is none; use 'single layer' or 'modified single layer'"):
        geometry.place(arcs, positions, 400e3, mapping_function="cosine")


@pytest.fixture
def one_arc() -> tuple[Arcs, np.ndarray]:
    """Half an hour of the invented network's first receiver, and its satellites' positions."""
    world = network.simulate("2031-03-11", ["MRGT"], hours=(2.0, 2.5), interval_s=60.0)
    observations, _ = choose(world.signals[0])
    every = world.satellite_positions(observations.times)
    columns = [list(map(str, world.sky.satellites)).index(str(name)) for name in observations.satellites]
    return cut(observations), every[:, columns]
