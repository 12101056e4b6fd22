"""Kill anything: a short form of `make chaos`."""

from __future__ import annotations

from pathlib import Path

import postgres
import pytest
from chaos import chaos


def test_two_desks_on_one_book_in_postgresql_with_everything_killed(tmp_path: Path) -> None:
    server = postgres.server()
    done = chaos(tmp_path, 10, 1, server.database(), server)
    assert set(done) == {"logger", "broker", "server", "desk", "missing"}


@pytest.mark.parametrize("seed", [2])
def test_one_desk_on_sqlite_with_everything_killed(tmp_path: Path, seed: int) -> None:
    assert set(chaos(tmp_path, 8, seed, f"sqlite:{tmp_path / 'book.db'}")) == {"logger", "broker", "desk", "missing"}


def test_a_logger_that_stops_at_the_brokers_word_loses_nothing_while_only_desks_and_server_are_killed(tmp_path: Path) -> None:
    server = postgres.server()
    done = chaos(tmp_path, 6, 3, server.database(), server, receipts=False, only=("desk", "server"))
    assert done["desk"] and done["server"] and done["missing"] == 0


def test_what_it_loses_with_the_broker_is_told_as_gaps(tmp_path: Path) -> None:
    done = chaos(tmp_path, 6, 4, f"sqlite:{tmp_path / 'book.db'}", receipts=False, only=("desk", "broker"))
    assert done["broker"] and done["desk"]
