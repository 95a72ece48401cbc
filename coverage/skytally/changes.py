"""Two accounts in JSON held side by side: which numbers differ, and of what they are."""

from __future__ import annotations

from collections.abc import Iterator, Mapping
from dataclasses import dataclass
from typing import Any

__all__ = ["Change", "Comparison", "compare"]

# What tells the entries of a table apart, and how each is said.
_KEYS = {
    "map": "map {}",
    "version": "map {}",
    "telescope": "{}",
    "band": "{}",
    "night": "night {}",
    "source": "source {}",
    "name": "{}",
    "telescopes": "{}",
    "file": "{}",
    "row": "row {}",
    "code": "{}",
}
# Another order of the same sums moves the last digits; more than this is a change.
_ROUNDING = 1e-9
_ROUNDING_NEAR_ZERO = 1e-12


@dataclass(frozen=True)
class Change:
    """One number or text that differs; None where it is missing.

    Attributes
    ----------
    part : str
        Key of the JSON's top level.
    of : str
        The entry, in words; empty where the part has one only.
    name : str
        Field, with the place in it where it is a list.
    before, after
        What it was, and what it is now.
    """

    part: str
    of: str
    name: str
    before: Any
    after: Any


@dataclass(frozen=True)
class Comparison:
    """What differs, how many values were compared, and how many differ by rounding alone."""

    changes: tuple[Change, ...]
    compared: int
    rounded: int


def compare(before: Mapping[str, Any], after: Mapping[str, Any], parts: list[str]) -> Comparison:
    """Compare the parts named of two accounts."""
    changes, compared, rounded = [], 0, 0
    for part in parts:
        for of, name, one, other in _pairs(before.get(part), after.get(part), "", ""):
            compared += 1
            if one == other and type(one) is type(other):
                continue
            if _is_rounding(one, other):
                rounded += 1
            else:
                changes.append(Change(part, of, name, one, other))
    return Comparison(tuple(changes), compared, rounded)


def _is_rounding(one: Any, other: Any) -> bool:
    if not (isinstance(one, float) and isinstance(other, float)):
        return False
    allowed = max(_ROUNDING * max(abs(one), abs(other)), _ROUNDING_NEAR_ZERO)
    return abs(one - other) <= allowed


def _pairs(one: Any, other: Any, of: str, name: str) -> Iterator[tuple[str, str, Any, Any]]:
    """Yield every value of either side beside the other's: entry, field, and both."""
    if isinstance(one, dict) and isinstance(other, dict):
        for key in {**one, **other}:
            inner = f"{name}.{key}" if name else str(key)
            yield from _pairs(one.get(key), other.get(key), of, inner)
    elif isinstance(one, list) and isinstance(other, list):
        if _are_entries(one) and _are_entries(other):
            yield from _entries(_labelled(one), _labelled(other), of, name)
        elif len(one) != len(other):
            yield of, name, f"{len(one)} values", f"{len(other)} values"
        else:
            for number, (left, right) in enumerate(zip(one, other)):
                yield from _pairs(left, right, of, f"{name}[{number}]")
    else:
        yield of, name, _plain(one), _plain(other)


def _are_entries(values: list[Any]) -> bool:
    return all(isinstance(value, dict) for value in values)


def _entries(
    one: dict[str, Any], other: dict[str, Any], of: str, name: str
) -> Iterator[tuple[str, str, Any, Any]]:
    for label in {**one, **other}:
        entry = ", ".join(part for part in (of, label) if part)
        left, right = one.get(label), other.get(label)
        if left is None or right is None:
            before, after = ("missing" if side is None else "there" for side in (left, right))
            yield entry, name, before, after
        else:
            yield from _pairs(left, right, entry, name)


def _labelled(entries: list[Any]) -> dict[str, Any]:
    """Name each entry by its own keys; those of one name by their number too."""
    found: dict[str, Any] = {}
    for entry in entries:
        label = _label(entry)
        number = 1
        while label in found:
            number += 1
            label = f"{_label(entry)} ({number})"
        found[label] = entry
    return found


def _label(entry: dict[str, Any]) -> str:
    said = []
    for key, form in _KEYS.items():
        value = entry.get(key)
        if isinstance(value, list):
            value = " + ".join(map(str, value))
        if isinstance(value, str | int):
            said.append(form.format(value))
    return ", ".join(said) or "all"


def _plain(value: Any) -> Any:
    """A value as it is; of a table or list that has become none, only that it was there."""
    return "there" if isinstance(value, dict | list) else value
