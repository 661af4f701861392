"""Puts this folder on the path, so that tests import the helpers beside it; and the signals back to what is usual."""

from __future__ import annotations

import signal
from collections.abc import Iterator

import pytest

USUAL = {"SIGINT": signal.default_int_handler, "SIGTERM": signal.SIG_DFL, "SIGHUP": signal.SIG_DFL}


@pytest.fixture(scope="session", autouse=True)
def usual_signals() -> Iterator[None]:
    """What `nohup`, or a shell that starts a background job, has ignored is ignored in every child as well."""
    names = [name for name in USUAL if hasattr(signal, name)]
    before = {name: signal.getsignal(getattr(signal, name)) for name in names}
    for name in names:
        if before[name] is signal.SIG_IGN:
            signal.signal(getattr(signal, name), USUAL[name])
    yield
    for name in names:
        if before[name] is signal.SIG_IGN:
            signal.signal(getattr(signal, name), before[name])
