"""How a long stage tells how far it has come."""

from collections.abc import Callable

Progress = Callable[[str, int, int], None]
"""Called as ``progress(stage, done, total)``."""


def no_progress(stage: str, done: int, total: int) -> None:
    """Report nothing: what is used where nobody watches."""
