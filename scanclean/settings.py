"""How a stage declares its settings: a frozen dataclass whose fields explain themselves.

Each stage module holds one such dataclass; `recipe` gathers them into the sections of a
recipe, checks what a user wrote against them and prints them with their defaults.
"""

from __future__ import annotations

from dataclasses import field
from typing import Any

__all__ = ["setting"]


def setting(
    default: Any,
    text: str,
    *,
    choices: tuple[str, ...] | None = None,
    low: float | None = None,
    high: float | None = None,
    auto: bool = False,
) -> Any:
    """A dataclass field with its explanation.

    Parameters
    ----------
    default : bool, int, float, str, Length, None or tuple of str
        None stands for ``"auto"`` and needs ``auto=True``.
    text : str
        One line for the reader of a recipe; says the unit where the value has none.
    choices : tuple of str, optional
        The allowed words of a string setting.
    low, high : float, optional
        The allowed range, both ends included; of a Length, in its own unit, so leave
        them out there unless 0 is the only limit.
    auto : bool
        Whether ``"auto"`` (None in Python) is allowed: the page's own measures decide.
    """
    metadata = {"text": text, "choices": choices, "low": low, "high": high, "auto": auto}
    return field(default=default, metadata=metadata)
