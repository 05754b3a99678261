"""Bytes on the network, and the links that carry them."""

from humbell.wire.block import BlockError, decode, encode

__all__ = ["BlockError", "decode", "encode"]
