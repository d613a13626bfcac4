"""How long work tells how far it is: one callable, so that no inner room knows a screen."""

from collections.abc import Callable

__all__ = ["Progress", "silent"]

Progress = Callable[[str, int, int], None]
"""Called with the name of the stage, how many steps are done, and how many there are (0 where not known)."""


def silent(stage: str, done: int, total: int) -> None:
    """Say nothing."""
