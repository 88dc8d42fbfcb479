"""Checks at the door that several rooms share; each message says what was wanted and what came."""

from __future__ import annotations

import difflib
from collections.abc import Iterable

__all__ = ["listed", "non_negative", "one_of", "open_fraction", "positive", "require_noise", "suggestion"]


#: More values than this are not spelled out in a message.
_LISTED = 12


def listed(values: Iterable[object], unit: str = "") -> str:
    """Comma-separated values for a message, numbers in their shortest form, e.g. ``480, 600 nm``; at most a dozen."""
    texts = [f"{value:g}" if isinstance(value, float) else str(value) for value in values]
    if len(texts) > _LISTED:
        unit = f"{unit} ({len(texts)} in all)".strip()
        texts = [*texts[: _LISTED - 2], "…", texts[-1]]
    return ", ".join(texts) + (f" {unit}" if unit and texts else "") if texts else "none"


def suggestion(word: str, known: Iterable[str]) -> str:
    """Tail of a message that names the known words nearest to an unknown one."""
    known = list(known)
    lowered = {name.lower(): name for name in known}
    near = [lowered[match] for match in difflib.get_close_matches(word.lower(), lowered, n=3, cutoff=0.5)]
    return f"; did you mean {' or '.join(near)}?" if near else f"; there are {listed(known)}"


def one_of(name: str, value: str, known: Iterable[str]) -> str:
    """Return `value` where it is one of the `known` words, else raise with the nearest ones."""
    known = list(known)
    if value not in known:
        raise ValueError(f"{name} must be one of {listed(known)}, got {value!r}")
    return value


def _number(name: str, value: object, wanted: str) -> float:
    try:
        return float(value)  # type: ignore[arg-type]
    except (TypeError, ValueError):
        raise TypeError(f"{name} must be {wanted}, got {value!r}") from None


def positive(name: str, value: object, unit: str = "") -> float:
    """Return `value` as a float where it is finite and above zero, else raise."""
    number = _number(name, value, "a number above zero")
    if not 0 < number < float("inf"):
        raise ValueError(f"{name} must be above zero and finite, got {number:g} {unit}".rstrip())
    return number


def non_negative(name: str, value: object, unit: str = "") -> float:
    """Return `value` as a float where it is finite and not negative, else raise."""
    number = _number(name, value, "a number, zero or above")
    if not 0 <= number < float("inf"):
        raise ValueError(f"{name} must be zero or above and finite, got {number:g} {unit}".rstrip())
    return number


def open_fraction(name: str, value: object) -> float:
    """Return `value` as a float where it lies between 0 and 1, both excluded, else raise."""
    number = _number(name, value, "a number between 0 and 1")
    if not 0 < number < 1:
        raise ValueError(f"{name} must lie between 0 and 1, both excluded, got {number:g}")
    return number


def require_noise(noise: object) -> None:
    """Raise where `noise` is neither a `Noise` nor None."""
    # told by what a Noise does, since this room lies below that of Noise
    if noise is not None and not hasattr(noise, "for_cube"):
        hint = f"; br.Noise(random={noise:g})?" if isinstance(noise, int | float) else ""
        raise TypeError(f"noise must be a br.Noise or None, got {type(noise).__name__}{hint}")
