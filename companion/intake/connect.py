"""The listener's MQTT client: a lasting session, manual acknowledgement, and nothing in the clear beyond this machine."""

from __future__ import annotations

import hashlib
import os
import socket
from collections.abc import Sequence

import paho.mqtt.client as mqtt
from paho.mqtt.enums import CallbackAPIVersion, MQTTProtocolVersion
from paho.mqtt.packettypes import PacketTypes
from paho.mqtt.properties import Properties

from companion.settings.errors import SiteError
from companion.settings.site import Site

PUBACK = 0x40
LOOPBACK = ("localhost", "127.0.0.1", "::1")
KEEPALIVE_S = 30
LASTING = 0xFFFFFFFF  # session expiry interval of MQTT 5 (3.1.2.11.2): never, as in MQTT 3.1.1


def client_of(site: Site) -> mqtt.Client:
    """A client for the site's broker, not yet connected. SiteError where the site's [mqtt] does not allow a connection."""
    five = site.mqtt.protocol == 5
    client = mqtt.Client(
        CallbackAPIVersion.VERSION2, session_name(site), None if five else False,
        protocol=MQTTProtocolVersion.MQTTv5 if five else MQTTProtocolVersion.MQTTv311, manual_ack=True)  # fmt: skip
    secure(client, site)
    client.reconnect_delay_set(1, 30)
    return client


def connect(client: mqtt.Client, site: Site) -> None:
    """Have the client connect, and connect again whenever it must, in its own thread; the session outlives the connection."""
    of = site.mqtt
    if of.protocol == 5:
        lasting = Properties(PacketTypes.CONNECT)  # type: ignore[no-untyped-call]
        lasting.SessionExpiryInterval = LASTING
        client.connect_async(of.host, of.port, KEEPALIVE_S, clean_start=False, properties=lasting)
    else:
        client.connect_async(of.host, of.port, KEEPALIVE_S)
    client.loop_start()


def acknowledge(client: mqtt.Client, mids: Sequence[int]) -> None:
    """Acknowledge QoS 1 messages by their packet ids, in this order, written together: thousands in the time of tens.

    A PUBACK of either version is four bytes (MQTT 3.1.1 and 5, 3.4). paho has no word for many at once, so that they go into its
    queue as one; a paho without that queue gets them one by one.
    """
    queue = getattr(client, "_packet_queue", None)
    if queue is None:
        for mid in mids:
            client.ack(mid, 1)
    elif mids:
        queue(PUBACK, b"".join(b"\x40\x02" + mid.to_bytes(2, "big") for mid in mids), mids[-1], 1)


def session_name(site: Site) -> str:
    """The client id: one a machine and site file, so that a restart finds its session, and a second desk takes no other's.

    23 letters and digits, which every broker accepts (MQTT 3.1.1, 3.1.3.1).
    """
    where = f"{socket.gethostname()}\n{site.path.resolve()}"
    return "levelbook" + hashlib.sha256(where.encode("utf-8", "surrogateescape")).hexdigest()[:14]


def secure(client: mqtt.Client, site: Site) -> None:
    """Give a client the site's CA, user and password. SiteError where a connection would stand in the clear."""
    of = site.mqtt
    if of.tls_ca is not None:
        try:
            client.tls_set(ca_certs=str(site.path.parent / of.tls_ca))
        except OSError as error:
            raise SiteError(
                [f"{site.path}: mqtt.tls_ca: {of.tls_ca} cannot be read ({error}); name the broker's CA certificate"]
            ) from None
    elif of.host not in LOOPBACK:
        raise SiteError(
            [f"{site.path}: mqtt.tls_ca: is missing, and {of.host} is another machine; name the broker's CA certificate"]
        )
    if of.username is not None:
        password = os.environ.get(of.password_env) if of.password_env else None
        if of.password_env and password is None:
            raise SiteError(
                [f"{site.path}: mqtt.password_env: {of.password_env} is not set in the environment; set it to the password"]
            )
        client.username_pw_set(of.username, password)
