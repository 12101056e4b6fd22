"""The few words that a book needs of its database; sqlite.py and postgres.py speak them.

SQL is written once, with ? for what is put in; {differs} is the comparison that treats two missing values as equal. An engine
has one connection; use one in each thread.
"""

from __future__ import annotations

from collections.abc import Iterable, Sequence
from typing import Any, Protocol

WAIT_S = 30.0  # for another's lock
COLUMNS = "(tank, life, seq, time_us, raw, temperature_c, barometer_pa, headspace_pa, battery_v, arrived_us)"  # of reading, in store()


class Engine(Protocol):
    """A database. name: for people. troubles: exceptions that mean it cannot be used just now. by_bytes: what orders text by its bytes."""

    name: str
    troubles: tuple[type[Exception], ...]
    by_bytes: str

    def execute(self, sql: str, args: Sequence[Any] = ()) -> Any:
        """One statement; its cursor."""

    def many(self, sql: str, rows: Iterable[Sequence[Any]]) -> None:
        """One statement for many rows."""

    def incoming(self, rows: Sequence[Sequence[Any]]) -> None:
        """Fill the table of what has come, incoming, anew."""

    def store(self, rows: Sequence[Sequence[Any]]) -> int:
        """Put rows of incoming's columns into reading, but for those whose identity is there; returns how many were new."""

    def begin(self) -> None:
        """Begin a transaction that may write."""

    def look(self) -> bool:
        """Begin a transaction in which all looks see one moment; False where one is going on already."""

    def hold(self, tank: int, alone: bool = False) -> None:
        """Until the transaction ends nobody seals the tank's days; alone: nobody writes to it either."""

    def month(self, day: int) -> None:
        """Make room for sealed days of a day's month; day: since 1970."""

    def upgrade(self) -> int:
        """Bring the tables to today's version; returns the version they have: a newer book stays as it is."""

    def close(self) -> None:
        """End the connection; what is committed is safe at any time."""
