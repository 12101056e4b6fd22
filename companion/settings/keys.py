"""One table of the site file, read key by key; every fault is noted and reading goes on, so that all are told at once."""

from __future__ import annotations

import difflib
import math
from collections.abc import Sequence
from datetime import UTC, date, datetime
from typing import Any

from companion.units import QuantityError, read


class Keys:
    """The keys of one table. What is read is checked and returned, or None with the fault noted.

    where: the table's name, as in tank.north.sensor. faults: the list that all tables of a file share, of "key: what to do".
    """

    def __init__(self, table: object, where: str, faults: list[str]) -> None:
        self.where, self.faults = where, faults
        self.table: dict[str, Any] = {}
        self.seen: set[str] = set()
        if isinstance(table, dict):
            self.table = table
        else:
            self.fault("", f"must be a table; write [{where}] and its keys below it")

    def __contains__(self, key: str) -> bool:
        return key in self.table

    def fault(self, key: str, words: str) -> None:
        """Note that a key is wrong."""
        name = ".".join(part for part in (self.where, key) if part)
        self.faults.append(f"{name}: {words}")

    def raw(self, key: str) -> Any:
        """The value as it stands; None where there is none."""
        self.seen.add(key)
        return self.table.get(key)

    def quantity(self, key: str, dimension: str, required: bool = False, positive: bool = False) -> float | None:
        """A quantity in SI, such as height = "0.12 m"."""
        value = self.raw(key)
        if value is None:
            if required:
                self.fault(key, f"is missing; write {key} = {_example(dimension)}")
            return None
        try:
            number = read(value, dimension)
        except QuantityError as error:
            self.fault(key, str(error))
            return None
        if positive and not number > 0.0:
            self.fault(key, f'must be above zero, but is "{value}"')
            return None
        return number

    def number(self, key: str, low: float, high: float, required: bool = False) -> float | None:
        """A bare number from low to high."""
        value = self.raw(key)
        if value is None:
            if required:
                self.fault(key, f"is missing; write a number from {low:g} to {high:g}")
            return None
        if (
            isinstance(value, bool)
            or not isinstance(value, (int, float))
            or not math.isfinite(value)
            or not low <= value <= high
        ):
            self.fault(key, f"must be a number from {low:g} to {high:g}, but is {value!r}")
            return None
        return float(value)

    def text(self, key: str, default: str | None = None, required: bool = False) -> str | None:
        """A line of text."""
        value = self.raw(key)
        if value is None:
            if required:
                self.fault(key, f'is missing; write {key} = "..."')
            return default
        if not isinstance(value, str) or not value.strip():
            self.fault(key, f"must be text in quotes, but is {value!r}")
            return default
        return value

    def choice(self, key: str, choices: Sequence[str], default: str | None = None) -> str | None:
        """One word of several; required where there is no default."""
        value = self.raw(key)
        if value is None:
            if default is None:
                self.fault(key, f"is missing; write one of {', '.join(choices)}")
            return default
        if value not in choices:
            self.fault(key, f"must be one of {', '.join(choices)}, but is {value!r}")
            return default
        return str(value)

    def since(self, key: str = "since") -> datetime | None:
        """A moment from which a setting holds, with its zone."""
        value = self.raw(key)
        if value is None:
            return None
        if isinstance(value, datetime) and value.tzinfo is not None:
            return value.astimezone(UTC)
        found = value.isoformat() if isinstance(value, (datetime, date)) else repr(value)
        self.fault(key, f"{found} has no zone; write a time like 2026-01-01T00:00:00Z, without quotes")
        return None

    def day(self, key: str) -> date | None:
        """A calendar day."""
        value = self.raw(key)
        if value is None or (isinstance(value, date) and not isinstance(value, datetime)):
            return value
        self.fault(key, f"must be a day like 2026-01-05, without quotes, but is {value!r}")
        return None

    def unknown(self, *known: str) -> None:
        """Note every key that was neither read nor is among the known."""
        names = self.seen | set(known)
        for key in self.table:
            if key not in names:
                near = difflib.get_close_matches(key, sorted(names), 1, 0.6)
                self.fault(
                    key,
                    f"is no key here; did you mean {near[0]}?"
                    if near
                    else f"is no key here; the keys are {', '.join(sorted(names))}",
                )


def _example(dimension: str) -> str:
    return {"length": '"1.5 m"', "pressure": '"1 bar"', "density": '"880 kg/m^3"'}.get(dimension, '"..."')
