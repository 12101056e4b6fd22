"""The shipped broker configuration, run as it is but for its paths and port: each to his own topics, and nobody else."""

from __future__ import annotations

import configparser
import contextlib
import json
import re
import shutil
import signal
import socket
import ssl
import subprocess
import sys
import threading
import time
from collections.abc import Callable, Iterator
from dataclasses import dataclass, field
from pathlib import Path

import needs
import paho.mqtt.client as mqtt
import pytest
from paho.mqtt.enums import CallbackAPIVersion
from sites import SITE, site_of

from companion.book.store import open_book
from companion.field.send import message, send
from companion.intake.listen import Listener
from companion.settings.site import Site
from core_mp import senml
from core_mp.mqtt import Client

SHIPPED = needs.ROOT / "configs/broker"
UNIT = needs.ROOT / "configs/systemd/levelbook-listen.service"
USERS = ("desk", "north", "south")
# /etc/mosquitto/mosquitto.conf of Debian 12's package, without its comments: what the shipped file is included by.
DEBIAN = """\
pid_file /run/mosquitto/mosquitto.pid

persistence true
persistence_location /var/lib/mosquitto/

log_dest file /var/log/mosquitto/mosquitto.log

include_dir /etc/mosquitto/conf.d
"""
Heard = list[tuple[str, bytes]]


@dataclass
class Running:
    """A broker with the shipped configuration; the folder holds what would be in /etc and /var."""

    folder: Path
    port: int
    child: subprocess.Popen[bytes] | None = None
    open: list[Client] = field(default_factory=list)

    def start(self) -> None:
        """Start mosquitto and wait until it answers; where it does not, fail with what it said."""
        said = self.folder / "stderr"
        with open(said, "wb") as out:
            self.child = subprocess.Popen(
                [needs.need("mosquitto", "Debian's mosquitto"), "-c", str(self.folder / "mosquitto.conf")], stderr=out
            )
        end = time.monotonic() + 10
        while time.monotonic() < end and self.child.poll() is None:
            with contextlib.suppress(OSError), socket.create_connection(("127.0.0.1", self.port), 0.2):
                return
            time.sleep(0.05)
        pytest.fail(f"mosquitto does not answer: {said.read_text()} {self.log()}")

    def stop(self) -> None:
        """Kill it, as a power cut does."""
        if self.child is not None:
            self.child.kill()
            self.child.wait()

    def log(self) -> str:
        path = self.folder / "mosquitto.log"
        return path.read_text() if path.exists() else ""

    def account(self, *words: str) -> None:
        """mosquitto_passwd on the file of accounts."""
        passwd = needs.need("mosquitto_passwd", "Debian's mosquitto")
        subprocess.run([passwd, words[0], str(self.folder / "passwords"), *words[1:]], check=True, capture_output=True)

    def tls(self, ca: str = "ca.pem") -> ssl.SSLContext:
        context = ssl.SSLContext(ssl.PROTOCOL_TLS_CLIENT)
        context.load_verify_locations(cafile=self.folder / ca)
        return context

    def logger(
        self,
        user: str | None,
        password: str | None = None,
        ca: str = "ca.pem",
        will: str | None = None,
        host: str = "localhost",
    ) -> Client:
        """A logger's client, connected; its will is its presence, or another topic."""
        one = Client(
            host,
            self.port,
            f"{user}-logger",
            user,
            password or (f"{user}-secret" if user else None),
            (will or f"levelbook/{user}/presence", "offline") if user else None,
            self.tls(ca),
            5,
        )
        one.connect()
        self.open.append(one)
        return one

    @contextlib.contextmanager
    def paho(
        self, user: str, *topics: str, name: str = "", lasting: bool = False, silent: bool = False
    ) -> Iterator[tuple[mqtt.Client, Heard]]:
        """paho's client as a user that hears topics, and what it heard.

        lasting: under this name, with a session that stays. silent: it acknowledges nothing.
        """
        heard: Heard = []
        ready = threading.Event()
        one = mqtt.Client(CallbackAPIVersion.VERSION2, name, not lasting, manual_ack=silent)
        one.username_pw_set(user, f"{user}-secret")
        one.tls_set(str(self.folder / "ca.pem"))
        one.on_message = lambda client, userdata, message: heard.append((message.topic, message.payload))
        one.on_connect = lambda client, *_: client.subscribe([(topic, 1) for topic in topics]) if topics else ready.set()
        one.on_subscribe = lambda *_: ready.set()
        one.connect("localhost", self.port)
        one.loop_start()
        try:
            assert ready.wait(10)
            yield one, heard
        finally:
            one.disconnect()
            one.loop_stop()


def openssl(folder: Path, *words: str) -> None:
    subprocess.run([needs.need("openssl", "Debian's openssl"), *words], cwd=folder, check=True, capture_output=True)


def certificates(folder: Path, days: int) -> None:
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


def replaced(text: str, changes: dict[str, str]) -> str:
    """A text with each change made in the one place where it applies."""
    for was, now in changes.items():
        assert text.count(was) == 1, f"{was!r} stands {text.count(was)} times"
        text = text.replace(was, now)
    return text


@contextlib.contextmanager
def shipped(folder: Path, days: int = 2) -> Iterator[Running]:
    """mosquitto with the shipped configuration, included as on Debian; only paths, port and address are replaced. days: of the certificate."""
    needs.need("mosquitto", "Debian's mosquitto")
    certificates(folder, days)
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    (folder / "conf.d").mkdir()
    (folder / "conf.d/levelbook.conf").write_text(
        replaced(
            (SHIPPED / "mosquitto.conf").read_text(),
            {
                "\nlistener 8883\n": f"\nlistener {port} 127.0.0.1\n",
                "/etc/mosquitto/certs/broker.pem": f"{folder}/broker.pem",
                "/etc/mosquitto/certs/broker.key": f"{folder}/broker.key",
                "/etc/mosquitto/levelbook.passwords": f"{folder}/passwords",
                "/etc/mosquitto/levelbook.acl": f"{folder}/acl",
            },
        )
    )
    (folder / "mosquitto.conf").write_text(
        replaced(
            DEBIAN,
            {
                "/run/mosquitto/": f"{folder}/",
                "/var/lib/mosquitto/": f"{folder}/",
                "/var/log/mosquitto/": f"{folder}/",
                "/etc/mosquitto/": f"{folder}/",
            },
        )
        + "user root\n"  # where root runs the tests: the folder is root's. No one else's mosquitto looks at it
    )
    shutil.copyfile(SHIPPED / "acl", folder / "acl")
    (folder / "acl").chmod(0o600)
    (folder / "passwords").touch(0o600)
    running = Running(folder, port)
    for user in USERS:
        running.account("-b", user, f"{user}-secret")
    try:
        running.start()
        yield running
    finally:
        for one in running.open:
            one.close()
        running.stop()


@pytest.fixture
def broker(tmp_path: Path) -> Iterator[Running]:
    with shipped(tmp_path) as running:
        yield running


def until(condition: Callable[[], object], seconds: float = 10.0) -> None:
    end = time.monotonic() + seconds
    while not condition():
        assert time.monotonic() < end, "did not happen in time"
        time.sleep(0.02)


def settled(one: Client) -> Heard:
    """What a logger's client has been sent: the broker answers a ping only after it."""
    one.ping()
    return one.messages(100)


def desk_site(broker: Running, **changed: str | None) -> Site:
    """A site on this broker as the desk's user. changed: keys of [mqtt] to say otherwise, or None to leave out."""
    shutil.copyfile(broker.folder / "ca.pem", broker.folder / "desk-ca.pem")
    keys = {"host": "localhost", "tls_ca": "desk-ca.pem", "username": "desk", "password_env": "DESK_PASSWORD"} | changed
    lines = "".join(f'{key} = "{value}"\n' for key, value in keys.items() if value is not None)
    return site_of(broker.folder, SITE + f"[mqtt]\nport = {broker.port}\n{lines}")


@contextlib.contextmanager
def listening(listener: Listener) -> Iterator[None]:
    stop = threading.Event()
    thread = threading.Thread(target=listener.run, args=(stop,))
    thread.start()
    try:
        yield
    finally:
        stop.set()
        thread.join(10)
        assert not thread.is_alive()


def test_a_logger_writes_its_own_and_nothing_else(broker: Running) -> None:
    with broker.paho("desk", "levelbook/+/readings", "levelbook/+/presence") as (_, heard):
        north = broker.logger("north")
        for topic in (
            "levelbook/south/readings",
            "levelbook/south/presence",
            "levelbook/north/kept",
            "levelbook/north/settings",
            "levelbook/south/kept",
            "levelbook/south/settings",
            "levelbook/north/readings/more",
            "levelbook/desk/readings",
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
    assert settled(south) == [] and settled(north) == []


def test_a_logger_hears_its_own_receipts_and_settings_and_nothing_of_others(broker: Running) -> None:
    """Of what was retained before it subscribed, and of what comes after."""
    everything = ("levelbook/#", "levelbook/south/kept", "levelbook/+/readings", "+/+/+", "#")
    own = {("levelbook/north/kept", b"to north"), ("levelbook/north/settings", b"to north")}
    early, south = broker.logger("north"), broker.logger("south")
    for topic in everything:
        early.subscribe(topic)
    for tank in ("south", "north"):
        with broker.paho(tank) as (logger, _):
            for name in ("readings", "presence"):
                logger.publish(f"levelbook/{tank}/{name}", f"of {tank}", 1, True).wait_for_publish(5)
    with broker.paho("desk") as (desk, _):
        for tank in ("south", "north"):
            for name in ("kept", "settings"):
                desk.publish(f"levelbook/{tank}/{name}", f"to {tank}", 1, True).wait_for_publish(5)
    assert set(settled(early)) == own
    late = broker.logger("north")
    for topic in everything:
        late.subscribe(topic)
    assert set(settled(late)) == own
    south.subscribe("levelbook/south/kept")  # what north did not hear is there
    assert settled(south) == [("levelbook/south/kept", b"to south")]


def test_the_desk_writes_receipts_and_settings_and_nothing_else(broker: Running) -> None:
    north = broker.logger("north")
    north.subscribe("levelbook/north/kept")
    with broker.paho("desk", "levelbook/+/readings", "levelbook/+/presence") as (desk, heard):
        for topic in ("levelbook/north/readings", "levelbook/north/presence"):
            desk.publish(topic, "forged", 1, True).wait_for_publish(5)
        desk.publish("levelbook/north/kept", "a receipt", 1).wait_for_publish(5)
        north.publish("levelbook/north/readings", "mine")
        until(lambda: heard)
        assert heard == [("levelbook/north/readings", b"mine")]
    assert settled(north) == [("levelbook/north/kept", b"a receipt")]


def test_the_will_of_a_logger_that_is_gone_is_heard_by_the_desk_but_not_as_another_tanks(broker: Running) -> None:
    with broker.paho("desk", "levelbook/+/presence") as (_, heard):
        with contextlib.suppress(OSError):
            broker.logger("north", will="levelbook/south/presence").close()
        broker.logger("north").close()
        until(lambda: heard)
        time.sleep(0.3)
        assert heard == [("levelbook/north/presence", b"offline")]


def test_strangers_are_refused(broker: Running) -> None:
    for user, password in ((None, None), ("north", "wrong"), ("north", "south-secret"), ("nobody", "nobody-secret")):
        with pytest.raises(OSError, match=r"refused the connection: .*x05"):  # not authorised: MQTT 3.1.1, 3.2.2.3
            broker.logger(user, password)
    with pytest.raises(ssl.SSLError, match="certificate verify failed"):
        broker.logger("north", ca="other.pem")
    with pytest.raises(OSError):
        Client("localhost", broker.port, "plain", "north", "north-secret", timeout_s=3).connect()  # not in the clear
    for host in ("localhost", "127.0.0.1"):
        broker.logger("north", host=host)


def test_a_certificate_that_has_ended_is_refused(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv("DESK_PASSWORD", "desk-secret")
    with shipped(tmp_path, days=-1) as expired:
        with pytest.raises(ssl.SSLError, match="certificate has expired"):
            expired.logger("north")
        listener = Listener(desk_site(expired), (said := []).append)
        with listening(listener):
            until(lambda: said)
        assert "certificate has expired" in said[0] and not listener.connected.is_set()


@pytest.mark.parametrize(
    ("changed", "password", "says"),
    [
        ({"tls_ca": "other.pem"}, "desk-secret", r"cannot be reached \(.*certificate verify failed"),
        ({"tls_ca": None}, "desk-secret", "connection is lost|cannot be reached"),  # in the clear
        ({"username": None, "password_env": None}, "", "refused the connection"),
        ({}, "wrong", "refused the connection"),
        ({"username": "north"}, "north-secret", ""),  # a logger's account: subscribes, and hears nothing
    ],
)
def test_a_listener_that_may_not_says_so_and_hears_nothing(
    broker: Running, monkeypatch: pytest.MonkeyPatch, changed: dict[str, str | None], password: str, says: str
) -> None:
    monkeypatch.setenv("DESK_PASSWORD", password)
    site = desk_site(broker, **changed)
    listener = Listener(site, (said := []).append)
    with listening(listener):
        until(lambda: said if says else listener.connected.is_set())
        broker.logger("south").publish("levelbook/south/readings", "of south")
        time.sleep(0.3)
    assert listener.tally.packs == 0 and listener.connected.is_set() is not bool(says)
    if says:
        assert [line for line in said if re.search(says, line)], said


def test_the_desk_listens_over_tls_and_its_receipt_and_settings_reach_the_logger(
    broker: Running, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    monkeypatch.setenv("DESK_PASSWORD", "desk-secret")
    site = desk_site(broker)
    listener = Listener(site)
    heard: Heard = []
    with listening(listener):
        assert listener.connected.wait(10)
        north = broker.logger("north")
        for name in ("kept", "settings"):
            north.subscribe(f"levelbook/north/{name}")
        pack = senml.pack("north", "counts", "k", 0, [(0, 1767225600, 7000, 9.5, None, None, None)])
        north.publish("levelbook/north/readings", pack)
        until(lambda: heard.extend(north.messages(200)) or heard)
        assert heard[0][0] == "levelbook/north/kept" and json.loads(heard[0][1]) == {"life": "k", "seq": 0}
        payload = message(site, "north", report_s=60)
        send(site, "north", payload)
        assert settled(north) == [("levelbook/north/settings", payload)]
    with open_book(site.store_url) as book:
        assert book.readings("north")["seq"].tolist() == [0]
    said = capsys.readouterr()
    assert "desk-secret" not in said.out + said.err + broker.log()


def test_an_account_taken_away_is_hung_up_on_at_the_next_reload_and_a_new_one_let_in(broker: Running) -> None:
    north, south = broker.logger("north"), broker.logger("south")
    broker.account("-D", "north")
    broker.account("-b", "mill", "mill-secret")
    assert broker.child is not None
    broker.child.send_signal(signal.SIGHUP)  # what `systemctl reload mosquitto` sends
    end = time.monotonic() + 10
    with pytest.raises(OSError):
        while time.monotonic() < end:
            north.ping()
            time.sleep(0.05)
    with pytest.raises(OSError, match="refused"):
        broker.logger("north")
    broker.logger("mill").ping()
    south.ping()


def test_a_broker_killed_while_the_desk_is_away_loses_the_last_hundred_messages_at_most(broker: Running) -> None:
    """And keeps more than the 1,000 that mosquitto keeps by default."""
    with broker.paho("desk", "levelbook/+/readings", name="listener", lasting=True):
        pass
    with broker.paho("north") as (north, _):
        for sent in [north.publish("levelbook/north/readings", str(n), 1) for n in range(1500)]:
            sent.wait_for_publish(10)
    broker.stop()
    broker.start()
    with broker.paho("desk", "levelbook/+/readings", name="listener", lasting=True) as (_, heard):
        until(lambda: len(heard) >= 1400)
    assert [int(payload) for _, payload in heard] == list(range(len(heard)))


def test_a_desk_that_is_slow_to_acknowledge_is_sent_more_than_twenty_messages(broker: Running) -> None:
    with broker.paho("desk", "levelbook/+/readings", silent=True) as (_, heard), broker.paho("north") as (north, _):
        for n in range(300):
            north.publish("levelbook/north/readings", str(n), 1)
        until(lambda: len(heard) == 300)


def test_a_board_that_speaks_no_newer_tls_than_1_2_is_let_in(broker: Running) -> None:
    context = broker.tls()
    context.maximum_version = ssl.TLSVersion.TLSv1_2
    one = Client("localhost", broker.port, "old", "north", "north-secret", tls=context, timeout_s=5)
    one.connect()
    one.ping()
    one.close()


def test_who_sends_more_than_a_pack_can_be_is_cut_off_and_the_others_go_on(broker: Running) -> None:
    with broker.paho("desk", "levelbook/+/readings") as (_, heard):
        north, south = broker.logger("north"), broker.logger("south")
        south.publish("levelbook/south/readings", "x" * 60_000)  # allowed: far more than a pack
        with pytest.raises(OSError):
            north.publish("levelbook/north/readings", "x" * 70_000)
        south.publish("levelbook/south/readings", "goes on")
        until(lambda: len(heard) >= 2)
    assert [(topic, len(payload)) for topic, payload in heard] == [("levelbook/south/readings", 60_000), ("levelbook/south/readings", 7)]  # fmt: skip


def service() -> configparser.SectionProxy:
    """The unit's [Service]."""
    unit = configparser.ConfigParser(interpolation=None)  # strict: a key said twice is an error
    unit.optionxform = str  # type: ignore[assignment, method-assign]
    unit.read_string(UNIT.read_text())
    return unit["Service"]


def test_the_unit_ends_the_listener_gently_starts_it_again_and_gives_it_little() -> None:
    keys = service()
    assert {
        "User": "levelbook",
        "StateDirectory": "levelbook",
        "EnvironmentFile": "/etc/levelbook/password",
        "KillSignal": "SIGTERM",
        "Restart": "always",
        "NoNewPrivileges": "yes",
        "ProtectSystem": "strict",
        "CapabilityBoundingSet": "",
    }.items() <= dict(keys).items()
    assert "secret" not in UNIT.read_text().lower() and "Environment" not in keys
    assert keys["WorkingDirectory"] == f"/var/lib/{keys['StateDirectory']}"


def test_the_units_command_is_one_that_levelbook_has(tmp_path: Path) -> None:
    program, *words = service()["ExecStart"].split()
    assert Path(program).is_absolute() and Path(program).name == "levelbook"
    done = subprocess.run(
        [sys.executable, "-c", "import sys; from companion.cli import main; sys.exit(main())", *words],
        cwd=tmp_path, env={"PYTHONPATH": str(needs.ROOT)}, capture_output=True, text=True)  # fmt: skip
    assert "site.toml" in done.stderr and "usage" not in done.stderr and "Traceback" not in done.stderr, done.stderr


def analyzed(folder: Path, text: str) -> tuple[list[str], float]:
    """What systemd says of the unit, and how exposed it finds the service, of 10."""
    path = folder / UNIT.name
    path.write_text(text)
    checked = subprocess.run(["systemd-analyze", "verify", str(path)], capture_output=True, text=True)
    rated = subprocess.run(["systemd-analyze", "security", "--offline=true", str(path)], capture_output=True, text=True)
    last = rated.stdout.strip().splitlines()[-1]
    return [line for line in checked.stderr.splitlines() if UNIT.stem in line], float(last.partition(": ")[2].split()[0])


def test_systemd_takes_every_line_of_the_unit_and_finds_it_shut(tmp_path: Path) -> None:
    if not shutil.which("systemd-analyze"):
        pytest.skip("systemd-analyze is missing: install Debian's systemd")
    text = replaced(UNIT.read_text(), {service()["ExecStart"].split()[0]: sys.executable})  # there need be no installation
    wrong, exposure = analyzed(tmp_path, text)
    assert wrong == [] and exposure <= 2.0
    wrong, exposure = analyzed(tmp_path, replaced(text, {"ProtectSystem=strict": "ProtectSystems=strict"}))
    assert len(wrong) == 1 and "Unknown key" in wrong[0]  # so that silence means something
