"""Bytes on the network, and the links that carry them."""

from humbell.wire.block import BlockError, decode, encode
from humbell.wire.broker import BrokerSettings, TlsSettings
from humbell.wire.errors import RefusedError
from humbell.wire.events import Message
from humbell.wire.mqtt import LinkHealth, MqttLink, Note

__all__ = [
    "BlockError",
    "BrokerSettings",
    "LinkHealth",
    "Message",
    "MqttLink",
    "Note",
    "RefusedError",
    "TlsSettings",
    "decode",
    "encode",
]
