"""Settings from the desk to a logger under real MicroPython, over a real broker."""

from __future__ import annotations

import json
import time
from pathlib import Path

import pytest
from boards import board, start
from sites import SITE, site_of

from companion.cli import main
from companion.field.broker import Broker
from companion.field.send import message
from companion.settings.errors import SiteError


def test_a_logger_takes_what_the_desk_sends_and_says_so(
    broker: Broker, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    folder = board(tmp_path / "board", every_s=1, report_s=60, again_s=1200)
    site_of(tmp_path, SITE.replace('"20 mA", "1 bar"', '"20 mA", "1.02 bar"') + f"[mqtt]\nport = {broker.port}\n")
    child = start("field_day.py", folder, broker.port, folder, 10**6)
    try:
        words = ["send", str(tmp_path / "site.toml"), "north", "--every", "2 min", "--fast", "3 cm", "--wait", "30"]
        assert main(words) == 0
        assert "the logger of north uses version" in capsys.readouterr().out
        kept = (folder / "settings.1").read_bytes()
        told = json.loads(kept[65:])
        assert (
            told["every_s"] == 120
            and told["fast_m"] == pytest.approx(0.03)
            and told["line"][4] == pytest.approx(1.02e5 / 26214)
        )
        time.sleep(1.1)  # a version is a second
        (folder / "settings.0").mkdir()  # and this flash is full
        assert main([*words[:3], "--wait", "30"]) == 0
        assert "refuses it (the flash is full)" in capsys.readouterr().out
    finally:
        child.kill()
        child.wait()


def test_settings_that_a_logger_would_refuse_are_not_sent(tmp_path: Path) -> None:
    site = site_of(tmp_path)
    with pytest.raises(SiteError, match=r"every_s must be from 1 to 86400, but is 0\.5"):
        message(site, "north", every_s=0.5)


def test_without_an_answer_it_says_that_it_was_sent(broker: Broker, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    site_of(tmp_path, SITE + f"[mqtt]\nport = {broker.port}\n")
    assert main(["send", str(tmp_path / "site.toml"), "north"]) == 0
    assert "takes it when it hears of it" in capsys.readouterr().out
    site_of(tmp_path, SITE + "[mqtt]\nport = 1\n")
    assert main(["send", str(tmp_path / "site.toml"), "north"]) == 1 and "cannot be reached" in capsys.readouterr().err
