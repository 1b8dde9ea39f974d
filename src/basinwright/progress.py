"""How far long work is: the loops that do it tell, and whoever wants to know listens."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from contextlib import contextmanager
from contextvars import ContextVar

Listener = Callable[[float, float, str], None]
"""Told what is done, of how much, and the unit that is counted."""

_listener: ContextVar[Listener | None] = ContextVar("listener", default=None)


def tell(done: float, total: float, unit: str) -> None:
    """Tell whoever listens how far a loop is.

    Parameters
    ----------
    done, total : float
        How much of how much; the last call of a loop says that all is done.
    unit : str
        What is counted, in the plural; ``%`` where it is a share of the time.
    """
    if (listener := _listener.get()) is not None:
        listener(done, total, unit)


@contextmanager
def heard_by(listener: Listener) -> Iterator[None]:
    """Let somebody hear what is told meanwhile."""
    token = _listener.set(listener)
    try:
        yield
    finally:
        _listener.reset(token)
