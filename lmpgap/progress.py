"""How long work tells that it is under way: a callback, so that the library itself never prints."""

from __future__ import annotations

from typing import Protocol


class Progress(Protocol):
    """Called as work proceeds.

    ``task`` names what is being done, ``done`` and ``total`` count its units. The first call of a task has
    ``done == 0``, the last ``done == total``.
    """

    def __call__(self, task: str, done: int, total: int) -> None:
        """Take note of the progress."""
        ...


def silent(task: str, done: int, total: int) -> None:
    """Do nothing: the default."""
