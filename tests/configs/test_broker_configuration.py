"""The shipped broker configuration, run as it is but for its paths and port: each to his own topics, and nobody else."""

from __future__ import annotations

import configparser
import contextlib
import json
import shutil
import socket
import ssl
import subprocess
import threading
import time
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import needs
import paho.mqtt.client as mqtt
import pytest
from paho.mqtt.enums import CallbackAPIVersion
from sites import SITE, site_of

from companion.book.store import open_book
from companion.intake.listen import Listener
from core_mp import senml
from core_mp.mqtt import Client

SHIPPED = needs.ROOT / "configs/broker"
USERS = ("desk", "north", "south")


@dataclass
class Running:
    folder: Path
    port: int

    def tls(self, ca: str = "ca.pem") -> ssl.SSLContext:
        context = ssl.SSLContext(ssl.PROTOCOL_TLS_CLIENT)
        context.load_verify_locations(cafile=self.folder / ca)
        return context

    def logger(self, user: str | None, password: str | None = None, ca: str = "ca.pem") -> Client:
        """A logger's client, connected; its will is its presence."""
        will = (f"levelbook/{user}/presence", "offline") if user else None
        one = Client(
            "localhost",
            self.port,
            f"{user}-logger",
            user,
            password or (f"{user}-secret" if user else None),
            will,
            self.tls(ca),
            5,
        )
        one.connect()
        return one


def openssl(folder: Path, *words: str) -> None:
    subprocess.run(["openssl", *words], cwd=folder, check=True, capture_output=True)


def certificates(folder: Path, days: int = 2) -> None:
    """A CA, the broker's certificate for localhost, and another CA that signed nothing."""
    key = ("-newkey", "ec", "-pkeyopt", "ec_paramgen_curve:prime256v1", "-nodes")
    for name in ("ca", "other"):
        openssl(
            folder, "req", "-x509", *key, "-days", "2", "-keyout", f"{name}.key", "-out", f"{name}.pem", "-subj", f"/CN={name}"
        )
    openssl(folder, "req", *key, "-keyout", "broker.key", "-out", "broker.csr", "-subj", "/CN=localhost")
    (folder / "san").write_text("subjectAltName=DNS:localhost,IP:127.0.0.1")
    openssl(folder, "x509", "-req", "-in", "broker.csr", "-CA", "ca.pem", "-CAkey", "ca.key", "-CAcreateserial", "-days", str(days), "-extfile", "san",
            "-out", "broker.pem")  # fmt: skip


@contextlib.contextmanager
def shipped(folder: Path, days: int = 2) -> Iterator[Running]:
    """mosquitto with the shipped configuration, its paths and port put into a folder."""
    needs.need("openssl", "Debian's openssl")
    mosquitto, passwords = needs.need("mosquitto", "Debian's mosquitto"), needs.need("mosquitto_passwd", "Debian's mosquitto")
    certificates(folder, days)
    (folder / "passwords").touch(0o600)
    for user in USERS:
        subprocess.run([passwords, "-b", str(folder / "passwords"), user, f"{user}-secret"], check=True, capture_output=True)
    shutil.copyfile(SHIPPED / "acl", folder / "acl")
    (folder / "acl").chmod(0o600)
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    text = (SHIPPED / "mosquitto.conf").read_text()
    for was, now in {
        "listener 8883\n": f"listener {port} 127.0.0.1\n", "/etc/mosquitto/certs/broker.pem": f"{folder}/broker.pem",
        "/etc/mosquitto/certs/broker.key": f"{folder}/broker.key", "/etc/mosquitto/levelbook.passwords": f"{folder}/passwords",
        "/etc/mosquitto/levelbook.acl": f"{folder}/acl", "/var/lib/mosquitto/": f"{folder}/",
    }.items():  # fmt: skip
        assert text.count(was) == 1, was
        text = text.replace(was, now)
    (folder / "mosquitto.conf").write_text(text + "user root\n")
    child = subprocess.Popen([mosquitto, "-c", str(folder / "mosquitto.conf")], stderr=subprocess.DEVNULL)
    try:
        end = time.monotonic() + 10
        while time.monotonic() < end:
            with contextlib.suppress(OSError), socket.create_connection(("127.0.0.1", port), 0.2):
                break
            time.sleep(0.05)
        yield Running(folder, port)
    finally:
        child.kill()
        child.wait()


@pytest.fixture
def broker(tmp_path: Path) -> Iterator[Running]:
    with shipped(tmp_path) as running:
        yield running


@contextlib.contextmanager
def desk(broker: Running, *topics: str, user: str = "desk") -> Iterator[list[tuple[str, bytes]]]:
    """A client of paho that hears topics; what it heard."""
    heard: list[tuple[str, bytes]] = []
    ready = threading.Event()
    one = mqtt.Client(CallbackAPIVersion.VERSION2)
    one.username_pw_set(user, f"{user}-secret")
    one.tls_set(str(broker.folder / "ca.pem"))
    one.on_message = lambda client, userdata, message: heard.append((message.topic, message.payload))
    one.on_connect = lambda client, *_: client.subscribe([(topic, 1) for topic in topics])
    one.on_subscribe = lambda *_: ready.set()
    one.connect("localhost", broker.port)
    one.loop_start()
    try:
        assert ready.wait(10)
        yield heard
    finally:
        one.disconnect()
        one.loop_stop()


def until(condition, seconds: float = 10.0) -> None:
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "did not happen in time"
        time.sleep(0.02)


def test_a_logger_writes_its_own_and_nothing_else(broker: Running) -> None:
    with desk(broker, "levelbook/+/readings", "levelbook/+/presence") as heard:
        north = broker.logger("north")
        for topic in (
            "levelbook/south/readings",
            "levelbook/south/presence",
            "levelbook/north/kept",
            "levelbook/north/settings",
            "other",
            "$SYS/x",
        ):
            with contextlib.suppress(OSError):  # refused in silence, or by hanging up
                north.publish(topic, "forged", True)
                continue
            north = broker.logger("north")
        north.publish("levelbook/north/readings", "mine")
        north.publish("levelbook/north/presence", "online", True)
        until(lambda: len(heard) >= 2)
        time.sleep(0.3)
        assert heard == [("levelbook/north/readings", b"mine"), ("levelbook/north/presence", b"online")]
    south = broker.logger("south")  # forged receipts and settings would be retained
    for name in ("kept", "settings"):
        south.subscribe(f"levelbook/south/{name}")
        north.subscribe(f"levelbook/north/{name}")
    assert south.messages(300) == [] and north.messages(300) == []


def test_a_logger_hears_its_own_receipts_and_settings_and_nothing_of_others(broker: Running) -> None:
    north, south = broker.logger("north"), broker.logger("south")
    for topic in ("levelbook/#", "levelbook/south/kept", "levelbook/+/readings", "#"):
        with contextlib.suppress(OSError):
            north.subscribe(topic)
            continue
        north = broker.logger("north")
    south.publish("levelbook/south/readings", "of south")
    one = mqtt.Client(CallbackAPIVersion.VERSION2)
    one.username_pw_set("desk", "desk-secret")
    one.tls_set(str(broker.folder / "ca.pem"))
    one.connect("localhost", broker.port)
    one.loop_start()
    for tank in ("south", "north"):
        for name in ("kept", "settings"):
            one.publish(f"levelbook/{tank}/{name}", f"to {tank}", 1, True).wait_for_publish(5)
    heard: list[tuple[str, bytes]] = []
    until(lambda: heard.extend(north.messages(200)) or len({topic for topic, _ in heard}) >= 2)
    heard += north.messages(300)
    one.disconnect()
    one.loop_stop()
    assert set(heard) == {("levelbook/north/kept", b"to north"), ("levelbook/north/settings", b"to north")}


def test_the_will_of_a_logger_that_is_gone_is_heard_by_the_desk(broker: Running) -> None:
    with desk(broker, "levelbook/+/presence") as heard:
        broker.logger("north").close()
        until(lambda: heard == [("levelbook/north/presence", b"offline")])


def test_strangers_are_refused(broker: Running) -> None:
    for user, password in ((None, None), ("north", "wrong"), ("nobody", "nobody-secret")):
        with pytest.raises(OSError, match="refused"):
            broker.logger(user, password)
    with pytest.raises(ssl.SSLError):
        broker.logger("north", ca="other.pem")
    with pytest.raises(OSError):
        Client("localhost", broker.port, "plain", "north", "north-secret", timeout_s=3).connect()  # not in the clear
    assert broker.logger("north")


def test_a_certificate_that_has_ended_is_refused(tmp_path: Path) -> None:
    with shipped(tmp_path, days=-1) as expired, pytest.raises(ssl.SSLError, match="expired"):
        expired.logger("north")


def test_the_desk_listens_over_tls_and_its_receipt_reaches_the_logger(
    broker: Running, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setenv("DESK_PASSWORD", "desk-secret")
    shutil.copyfile(broker.folder / "ca.pem", broker.folder / "desk-ca.pem")
    site = site_of(
        broker.folder,
        SITE
        + f'[mqtt]\nhost = "localhost"\nport = {broker.port}\ntls_ca = "desk-ca.pem"\nusername = "desk"\npassword_env = "DESK_PASSWORD"\n',
    )
    listener, stop = Listener(site), threading.Event()
    thread = threading.Thread(target=listener.run, args=(stop,))
    thread.start()
    try:
        assert listener.connected.wait(10)
        north = broker.logger("north")
        north.subscribe("levelbook/north/kept")
        north.publish(
            "levelbook/north/readings", senml.pack("north", "counts", "k", 0, [(0, 1767225600, 7000, 9.5, None, None, None)])
        )
        heard: list[tuple[str, bytes]] = []
        until(lambda: heard.extend(north.messages(200)) or heard)
        assert json.loads(heard[0][1]) == {"life": "k", "seq": 0}
    finally:
        stop.set()
        thread.join(10)
    with open_book(site.store_url) as book:
        assert book.readings("north")["seq"].tolist() == [0]
    said = capsys.readouterr()
    assert "desk-secret" not in said.out + said.err


def test_the_unit_ends_the_listener_gently_and_starts_it_again() -> None:
    unit = configparser.ConfigParser(interpolation=None, strict=False)
    unit.optionxform = str  # type: ignore[assignment]
    path = needs.ROOT / "configs/systemd/levelbook-listen.service"
    unit.read_string(path.read_text())
    service = unit["Service"]
    assert (
        service["ExecStart"].endswith("levelbook listen site.toml")
        and service["KillSignal"] == "SIGTERM"
        and service["Restart"] == "always"
    )
    assert service["User"] == "levelbook" and service["NoNewPrivileges"] == "yes" and service["ProtectSystem"] == "strict"
    if shutil.which("systemd-analyze"):
        done = subprocess.run(["systemd-analyze", "verify", str(path)], capture_output=True, text=True)
        wrong = [
            line
            for line in done.stderr.splitlines()
            if "levelbook-listen" in line and "is not executable" not in line and "No such file" not in line
        ]
        assert not wrong, wrong
