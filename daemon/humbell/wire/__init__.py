"""Bytes on the network, and the links that carry them."""

from humbell.wire.block import BlockError, decode, encode
from humbell.wire.broker import BrokerSettings, TlsSettings
from humbell.wire.errors import NoRoomError, RefusedError
from humbell.wire.events import Message
from humbell.wire.health import LinkHealth
from humbell.wire.mqtt import MqttLink, Note

__all__ = [
    "BlockError",
    "BrokerSettings",
    "LinkHealth",
    "Message",
    "MqttLink",
    "NoRoomError",
    "Note",
    "RefusedError",
    "TlsSettings",
    "decode",
    "encode",
]
