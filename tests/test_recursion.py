"""leveller.recursion: the plain loop, bit for bit."""

from __future__ import annotations

import numpy as np
import pytest

from leveller.recursion import recursion

STEPS = {
    "clamped": lambda state, value: np.minimum(np.maximum(state, -2.0), 2.0) + value,
    "smoothed": lambda state, value: value + np.where(value < state, 0.3, 0.95) * (state - value),
    "never forgets": lambda state, value: state + value,
}


@pytest.mark.parametrize("name", STEPS)
@pytest.mark.parametrize("count", [0, 1, 9, 10, 11, 4003])
@pytest.mark.parametrize("part", [1, 10, 1000])
def test_equals_the_plain_loop(name: str, count: int, part: int) -> None:
    """At any length and any part, also over long rests in which nothing is forgotten."""
    random = np.random.default_rng(count)
    values = random.normal(0, 1, count) * (random.random(count) < 0.5)
    values[count // 3 : 2 * count // 3] = 0.0
    step, state, expected = STEPS[name], np.zeros(1), []
    for value in values:
        state = step(state, np.array([value]))
        expected.append(float(state[0]))
    assert recursion(values, step, part=part).tolist() == expected


def test_what_forgets_is_not_run_twice() -> None:
    """A recursion that soon meets itself costs little more than one round."""
    calls = 0

    def step(state: np.ndarray, value: np.ndarray) -> np.ndarray:
        nonlocal calls
        calls += 1
        return np.minimum(np.maximum(state, -2.0), 2.0) + value

    recursion(np.random.default_rng(1).normal(0, 1.5, 100_000), step, part=1000)
    assert calls < 1200
