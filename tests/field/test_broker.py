"""A broker of our own: there when asked for, on loopback only, gone afterwards, whichever program it is."""

from __future__ import annotations

import os
import socket
import subprocess
import sys
import time
from pathlib import Path

import needs
import paho.mqtt.client as mqtt
import pytest
from paho.mqtt.enums import CallbackAPIVersion

from companion.field.broker import BrokerError, local_broker

PROGRAMS = {"mosquitto": "Debian's mosquitto", "iotcore": "PyPI's iotcore"}


@pytest.mark.parametrize("program", PROGRAMS)
def test_a_message_goes_through_and_the_port_is_free_afterwards(program: str) -> None:
    needs.need(program, PROGRAMS[program])
    came: list[bytes] = []
    with local_broker(program=program) as broker:
        assert (broker.host, broker.program) == ("127.0.0.1", program)
        one = mqtt.Client(CallbackAPIVersion.VERSION2)
        one.on_message = lambda client, userdata, message: came.append(message.payload)
        one.on_connect = lambda client, *_: client.subscribe("t", 1)
        one.on_subscribe = lambda client, *_: client.publish("t", b"hello", 1)
        one.connect(broker.host, broker.port)
        one.loop_start()
        end = time.monotonic() + 10
        while not came and time.monotonic() < end:
            time.sleep(0.02)
        one.disconnect()
        one.loop_stop()
    assert came == [b"hello"]
    with pytest.raises(OSError), socket.create_connection((broker.host, broker.port), timeout=0.5):
        pass


def test_it_is_gone_when_the_block_breaks_off() -> None:
    needs.need("mosquitto", PROGRAMS["mosquitto"])
    with pytest.raises(RuntimeError), local_broker() as broker:
        raise RuntimeError
    with pytest.raises(OSError), socket.create_connection((broker.host, broker.port), timeout=0.5):
        pass


@pytest.mark.parametrize("program", PROGRAMS)
def test_it_is_gone_when_the_program_that_started_it_is_killed(program: str, tmp_path: Path) -> None:
    needs.need(program, PROGRAMS[program])
    code = f"import time; from companion.field.broker import local_broker as b\nwith b(program='{program}') as at: print(at.port, flush=True); time.sleep(60)"
    environment = os.environ | {"PYTHONPATH": str(needs.ROOT), "TMPDIR": str(tmp_path)}
    with subprocess.Popen([sys.executable, "-c", code], env=environment, stdout=subprocess.PIPE, text=True) as child:
        port = int(child.stdout.readline())
        child.kill()
    end = time.monotonic() + 10
    while list(tmp_path.iterdir()):
        assert time.monotonic() < end, "the broker's folder is still there"
        time.sleep(0.02)
    with pytest.raises(OSError), socket.create_connection(("127.0.0.1", port), timeout=0.5):
        pass


def test_an_unknown_program_is_one_clear_error() -> None:
    with pytest.raises(BrokerError, match="no broker to start: install other"), local_broker(program="other"):
        pass
