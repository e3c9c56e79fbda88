"""The banded normal equations against the same problem solved whole, with the full covariance of every row."""

import numpy as np
import pytest

from skylag.ionosphere.normal import Design, Normal, known, place_terms, time_splines


@pytest.fixture
def problem(rng: np.random.Generator) -> tuple[Design, np.ndarray, np.ndarray, np.ndarray, np.ndarray]:
    """Rows of three receivers and four satellites over six hours: design, weights, arc of row, variances, content."""
    seconds = np.sort(rng.uniform(0.0, 6 * 3600.0, 400))
    values, first, splines = time_splines(seconds, 3600.0)
    arc = rng.integers(0, 12, 400)
    order = np.lexsort((arc, first))
    values, first, arc = values[order], first[order], arc[order]
    terms = place_terms(rng.uniform(-42, -38, 400), rng.uniform(143, 148, 400), (-40.0, 145.0), 1)
    vertical = (values[:, :, None] * terms[:, None, :]).reshape(400, -1)
    design = Design(
        receiver=arc % 3, satellite=3 + arc // 3, factor=rng.uniform(-3.0, -2.0, 400),
        slant=vertical * rng.uniform(1.0, 2.5, 400)[:, None], vertical=vertical, first=first * 3,
        high=rng.uniform(2.0, 5.0, 400),
        starts=np.concatenate([np.flatnonzero(np.diff(first, prepend=-1)), [400]]),
        biases=7, splines=splines, terms=3, degree=1,
    )  # fmt: skip
    return design, rng.uniform(1.0, 9.0, 400), arc, rng.uniform(0.1, 2.0, 12), rng.normal(20.0, 5.0, 400)


def whole(design: Design) -> np.ndarray:
    """The design as one matrix."""
    matrix = np.zeros((len(design.first), design.size))
    rows = np.arange(len(design.first))
    matrix[rows, design.receiver] = design.factor
    matrix[rows, design.satellite] = design.factor
    for column in range(design.slant.shape[1]):
        matrix[rows, design.biases + design.first + column] = design.slant[:, column]
    matrix[:, -1] = design.high
    return matrix


def test_same_as_solved_whole(problem: tuple) -> None:
    design, weight, arc, variance, content = problem
    knowledge = [known(np.array([row]), np.ones(1), 0.3 * row, 0.04) for row in range(design.size)]
    normal = Normal(design, weight, arc, variance, knowledge)
    x, effect = normal.solve(content)
    # V = diag(1 / w) + E diag(variance) E', all written out; weak knowledge as further rows.
    matrix = whole(design)
    belongs = (arc[:, None] == np.arange(12)[None, :]).astype(float)
    covariance = np.diag(1.0 / weight) + belongs @ np.diag(variance) @ belongs.T
    inverse = np.linalg.inv(covariance)
    full = matrix.T @ inverse @ matrix + 0.04 * np.eye(design.size)
    right = matrix.T @ inverse @ content + 0.04 * 0.3 * np.arange(design.size)
    expected = np.linalg.solve(full, right)
    assert x == pytest.approx(expected, rel=1e-7, abs=1e-8)
    assert normal.covariance() == pytest.approx(np.linalg.inv(full)[:7, :7], rel=1e-7, abs=1e-10)
    residual = content - matrix @ expected
    assert effect == pytest.approx(np.diag(variance) @ belongs.T @ inverse @ residual, rel=1e-6, abs=1e-8)
    assert design.predict(x) == pytest.approx(matrix @ x, rel=1e-9)
    step = np.linspace(0.0, 1.0, 400)
    assert normal.respond(step) == pytest.approx(np.linalg.solve(full, matrix.T @ inverse @ step), rel=1e-6, abs=1e-8)


def test_splines_add_up_to_one() -> None:
    """B-splines are a partition of unity, at both ends too."""
    seconds = np.linspace(0.0, 86_370.0, 500)
    values, first, count = time_splines(seconds, 1800.0)
    assert values.sum(axis=1) == pytest.approx(1.0)
    assert first.min() == 0 and first.max() + 4 == count == 51


def test_span_shorter_than_a_knot_has_one_interval() -> None:
    values, first, count = time_splines(np.array([0.0, 100.0, 600.0]), 1800.0)
    assert count == 4 and np.all(first == 0) and values.shape == (3, 4)


def test_place_terms_do_not_tear_at_180_degrees() -> None:
    there = place_terms(np.array([-40.0, -40.0]), np.array([179.5, -179.5]), (-40.0, 179.9), 2)
    here = place_terms(np.array([-40.0, -40.0]), np.array([145.0, 146.0]), (-40.0, 145.4), 2)
    assert there == pytest.approx(here)
