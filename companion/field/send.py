"""Settings to a logger in the field: retained on levelbook/<tank>/settings, whole or not at all, as core_mp/settings.py reads them."""

from __future__ import annotations

import hashlib
import json
import threading
import time
from typing import Any

import paho.mqtt.client as mqtt
from paho.mqtt.enums import CallbackAPIVersion

from companion.field.pack import told
from companion.intake.connect import secure
from companion.intake.senml import WireError
from companion.intake.wire import decode
from companion.settings.errors import SiteError
from companion.settings.site import Site
from core_mp.settings import RANGES

CALIBRATION = ("line", "limits", "height_m")
WAIT_S = 10.0


def message(site: Site, tank: str, **changed: float) -> bytes:
    """The message that gives a tank's logger the calibration in force now, and changed settings (names of RANGES). SiteError."""
    for name, value in changed.items():
        low, high = RANGES[name]
        if not low <= value <= high:
            raise SiteError([f"{name} must be from {low} to {high}, but is {value:g}"])
    settings = told(site.tank(tank), 0)
    content: dict[str, Any] = {"tank": tank, "version": int(time.time())}
    if "points" not in settings and settings["signal"] != "level":  # a line that bends comes with a bundle only
        content |= {name: settings[name] for name in CALIBRATION}
    body = json.dumps(content | changed).encode()
    return hashlib.sha256(body).hexdigest().encode() + b"\n" + body


def send(site: Site, tank: str, payload: bytes, wait_s: float = 0.0) -> str:
    """Publish settings for a tank's logger, retained; returns what became of them, in a line. wait_s: how long to wait for its answer.

    SiteError where the broker cannot be reached.
    """
    version = json.loads(payload[65:])["version"]
    answered, sent = threading.Event(), threading.Event()
    answer: list[str] = []

    def on_message(client: mqtt.Client, userdata: Any, heard: mqtt.MQTTMessage) -> None:
        try:
            said = decode(heard.topic, bytes(heard.payload), site.signal).said
        except (WireError, SiteError):
            return
        if said.get("settings") == version:
            answer.append(f"the logger of {tank} uses version {version} now")
        elif "refused" in said:
            answer.append(
                f"the logger of {tank} refuses it ({said['refused']}) and goes on with version {said.get('settings')}"
            )
        if answer:
            answered.set()

    def on_connect(client: mqtt.Client, userdata: Any, flags: Any, reason: Any, properties: Any) -> None:
        client.subscribe(f"levelbook/{tank}/readings", 1)

    client = mqtt.Client(CallbackAPIVersion.VERSION2)
    client.on_message, client.on_connect = on_message, on_connect
    client.on_subscribe = lambda *_: sent.set()
    secure(client, site)
    try:
        client.connect(site.mqtt.host, site.mqtt.port)
    except OSError as error:
        raise SiteError([f"{site.path}: mqtt: broker {site.mqtt.host}:{site.mqtt.port} cannot be reached ({error})"]) from None
    client.loop_start()
    try:
        if not sent.wait(WAIT_S):
            raise SiteError(
                [f"{site.path}: mqtt: broker {site.mqtt.host}:{site.mqtt.port} refuses; check username and password_env"]
            )
        client.publish(f"levelbook/{tank}/settings", payload, qos=1, retain=True).wait_for_publish(WAIT_S)
        if wait_s:
            answered.wait(wait_s)
    finally:
        client.disconnect()
        client.loop_stop()
    return answer[0] if answer else f"version {version} is sent; the logger of {tank} takes it when it hears of it"
