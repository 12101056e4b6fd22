"""Kill anything: a short form of `make chaos`."""

from __future__ import annotations

from pathlib import Path

import postgres
import pytest
from chaos import chaos


def test_two_desks_on_one_book_in_postgresql_with_everything_killed(tmp_path: Path) -> None:
    server = postgres.server()
    done = chaos(tmp_path, 10, 1, server.database(), server)
    assert set(done) == {"logger", "broker", "server", "desk"}


@pytest.mark.parametrize("seed", [2])
def test_one_desk_on_sqlite_with_everything_killed(tmp_path: Path, seed: int) -> None:
    assert set(chaos(tmp_path, 8, seed, f"sqlite:{tmp_path / 'book.db'}")) == {"logger", "broker", "desk"}
