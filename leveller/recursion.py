"""A recursion over time, out[i] = step(out[i - 1], values[i]), run over many parts of the time side by side.

Purpose: a decoder's lead or a smoother's gain needs the value before it, which in plain Python is the slowest
step of all. Both forget: whatever they start from, they soon meet the same values to the
last bit (a clamp is hit, a release ends at 0).

Method: the time is cut into parts, all parts step together as one array, each from a guess. Then every part is run
again from where the part before it really ended, until it meets what is there; parts whose end has changed by that hand
on to the next ones. So the result is that of the plain loop, bit for bit, at any length of the parts; a recursion that
never forgets costs as many rounds as there are parts.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np
import numpy.typing as npt

PART = 1000

Row = npt.NDArray[np.float64]


def recursion(values: npt.NDArray[np.floating], step: Callable[[Row, Row], Row], *, part: int = PART) -> Row:
    """All states of a recursion that starts from 0.

    Parameters
    ----------
    values : shape=(n,)
    step : callable (state, value) -> state
        Element by element on float64 arrays of one shape.
    part : int
        How many values are stepped one after the other.

    Returns
    -------
    shape=(n,), float64
    """
    count = len(values)
    parts = -(-count // part)
    inputs = np.zeros((parts, part))
    inputs.reshape(-1)[:count] = values
    inputs = np.ascontiguousarray(inputs.T)  # (part, parts): what is stepped together lies together
    out = np.empty_like(inputs)
    state = np.zeros(parts)
    for row in range(part):
        state = out[row] = step(state, inputs[row])
    open_ = np.arange(1, parts)
    while len(open_):
        open_ = _run_again(inputs, out, open_, step) + 1
        open_ = open_[open_ < parts]
    return np.ascontiguousarray(out.T).reshape(-1)[:count]


def _run_again(inputs: Row, out: Row, which: npt.NDArray[np.int64], step: Callable[[Row, Row], Row]
               ) -> npt.NDArray[np.int64]:
    """Run some parts from the ends of those before them until they meet what is there; those whose end has changed."""
    state = out[-1, which - 1]
    for row in range(len(inputs)):
        state = step(state, inputs[row, which])
        differs = out[row, which] != state
        if not differs.all():
            which, state = which[differs], state[differs]
            if not len(which):
                break
        out[row, which] = state
    return which
