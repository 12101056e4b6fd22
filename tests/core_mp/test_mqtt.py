"""The logger's MQTT client: on real mosquitto, with password and TLS; and no wait without an end."""

from __future__ import annotations

import contextlib
import socket
import ssl
import subprocess
import threading
import time
from collections.abc import Iterator
from pathlib import Path

import needs
import pytest

from companion.field.broker import Broker
from core_mp.mqtt import Client


@contextlib.contextmanager
def server(answer) -> Iterator[int]:
    """A server on loopback that treats its first connection as told; its port."""
    with socket.create_server(("127.0.0.1", 0)) as listening:

        def serve() -> None:
            with contextlib.suppress(OSError):
                connection, _ = listening.accept()
                answer(connection)
                time.sleep(3)
                connection.close()

        threading.Thread(target=serve, daemon=True).start()
        yield listening.getsockname()[1]


def test_what_is_published_comes_and_an_id_is_never_0(broker: Broker) -> None:
    hears, says = Client(broker.host, broker.port, "a"), Client(broker.host, broker.port, "b")
    for client in (hears, says):
        client.connect()
    hears.subscribe("t/#")
    says._id = 65533
    for n in range(5):  # over the end of the ids: 65535, then 1
        says.publish(f"t/{n}", "x" * 300)
    assert says._id == 3
    came: list[tuple[str, bytes]] = []
    while len(came) < 5:
        more = hears.messages(2000)
        assert more
        came += more
    assert came == [(f"t/{n}", b"x" * 300) for n in range(5)]
    says.ping()
    hears.close()
    says.close()


def test_a_retained_message_and_the_will_are_there_for_who_comes_later(broker: Broker) -> None:
    logger = Client(broker.host, broker.port, "logger", will=("p", "offline"))
    logger.connect()
    logger.publish("p", "online", True)
    late = Client(broker.host, broker.port, "late")
    late.connect()
    late.subscribe("p")
    assert late.messages(2000) == [("p", b"online")]
    logger.close()  # without a word, as when power fails
    assert late.messages(5000) == [("p", b"offline")]
    late.close()


@pytest.mark.parametrize(
    "answer",
    [
        lambda connection: None,  # accepts and stalls
        lambda connection: connection.send(b"\x20"),  # begins to answer and stalls
        lambda connection: connection.close(),
        lambda connection: connection.send(b"\x20\x02\x00\x05"),  # refuses: not authorised
        lambda connection: connection.send(b"\x30\xff\xff\xff\xff\xff"),  # no MQTT
        lambda connection: connection.send(b"HTTP/1.1 400 Bad Request\r\n\r\n"),
    ],
)
def test_a_broker_that_stalls_refuses_or_is_none_is_an_error_in_time(answer) -> None:
    with server(answer) as port:
        client = Client("127.0.0.1", port, "a", timeout_s=0.5)
        began = time.monotonic()
        with pytest.raises(OSError):
            client.connect()
        assert time.monotonic() - began < 2.5
        with pytest.raises(OSError):
            client.publish("t", "x")


def test_a_broker_that_stalls_after_connecting_is_an_error_in_time() -> None:
    with server(lambda connection: connection.send(b"\x20\x02\x00\x00")) as port:
        client = Client("127.0.0.1", port, "a", timeout_s=0.5)
        client.connect()
        with pytest.raises(OSError):
            client.publish("t", "x")


def certificates(folder: Path) -> None:
    """A CA of our own, the broker's certificate by it, and a CA that knows nothing of it."""
    needs.need("openssl", "Debian's openssl")

    def run(*words: str) -> None:
        subprocess.run(["openssl", *words], cwd=folder, check=True, capture_output=True)

    for ca in ("ca", "other"):
        run(
            "req",
            "-x509",
            "-newkey",
            "rsa:2048",
            "-nodes",
            "-days",
            "2",
            "-subj",
            f"/CN={ca}",
            "-keyout",
            f"{ca}.key",
            "-out",
            f"{ca}.pem",
        )
    run(
        "req",
        "-newkey",
        "rsa:2048",
        "-nodes",
        "-subj",
        "/CN=localhost",
        "-addext",
        "subjectAltName=DNS:localhost",
        "-keyout",
        "broker.key",
        "-out",
        "broker.csr",
    )
    run(
        "x509",
        "-req",
        "-in",
        "broker.csr",
        "-CA",
        "ca.pem",
        "-CAkey",
        "ca.key",
        "-CAcreateserial",
        "-days",
        "2",
        "-copy_extensions",
        "copy",
        "-out",
        "broker.pem",
    )


def test_tls_with_a_ca_is_spoken_and_a_wrong_ca_or_password_is_refused(tmp_path: Path) -> None:
    """On CPython, whose ssl module MicroPython's follows; PyPI's build of the unix port has none."""
    mosquitto = needs.need("mosquitto", "Debian's mosquitto")
    certificates(tmp_path)
    passwd = needs.need("mosquitto_passwd", "Debian's mosquitto")
    subprocess.run([passwd, "-c", "-b", str(tmp_path / "users"), "north", "right"], check=True, capture_output=True)
    with socket.socket() as probe:
        probe.bind(("127.0.0.1", 0))
        port = probe.getsockname()[1]
    (tmp_path / "m.conf").write_text(f"listener {port} 127.0.0.1\ncafile {tmp_path}/ca.pem\ncertfile {tmp_path}/broker.pem\nkeyfile {tmp_path}/broker.key\n"
                                     f"password_file {tmp_path}/users\nallow_anonymous false\nuser root\nlog_type error\n")  # fmt: skip
    broker = subprocess.Popen([mosquitto, "-c", str(tmp_path / "m.conf")], stderr=subprocess.DEVNULL)
    try:
        end = time.monotonic() + 10
        while time.monotonic() < end:
            with contextlib.suppress(OSError), socket.create_connection(("127.0.0.1", port), 0.2):
                break
            time.sleep(0.05)

        def client(ca: str, password: str) -> Client:
            context = ssl.SSLContext(ssl.PROTOCOL_TLS_CLIENT)
            context.load_verify_locations(cafile=tmp_path / ca)
            return Client("localhost", port, "tls", "north", password, tls=context, timeout_s=5)

        good = client("ca.pem", "right")
        good.connect()
        good.subscribe("t")
        good.publish("t", "over tls " * 50)
        assert good.messages(3000) == [("t", b"over tls " * 50)]
        good.close()
        with pytest.raises(ssl.SSLError):
            client("other.pem", "right").connect()
        with pytest.raises(OSError, match=r"refused the connection: .*[45]"):
            client("ca.pem", "wrong").connect()
    finally:
        broker.kill()
        broker.wait()


def test_a_message_too_long_for_a_board_is_cut_off_and_the_connection_goes_on(broker: Broker) -> None:
    """A retained one would otherwise end every connection, and with it the logger."""
    says, hears = Client(broker.host, broker.port, "says"), Client(broker.host, broker.port, "hears")
    says.connect()
    says.publish("levelbook/north/settings", "x" * 50_000, True)
    hears.connect()
    hears.subscribe("levelbook/north/settings")
    came: list[tuple[str, bytes]] = []
    while not came:
        came = hears.messages(2000)
    assert came[0][0] == "levelbook/north/settings" and 4000 < len(came[0][1]) < 4096
    says.publish("levelbook/north/settings", "short")
    assert hears.messages(2000) == [("levelbook/north/settings", b"short")]
    hears.ping()
