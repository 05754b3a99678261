"""Where files that are played one after the other lie in time, and which of them join up. Pure."""

from collections.abc import Sequence
from dataclasses import dataclass

from humbell.model import ConfigError, InputError
from humbell.sources.recording import Header


@dataclass(frozen=True, slots=True)
class Placed:
    """
    One file and its place in time.

    Args:
        header: of the file.

        boot: the same as that of the file before it exactly where the two are one recording.

        start_ns: UTC of the first sample, ns since 1970.

        end_ns: UTC at which a file without a time of its own follows.

        piece_starts_ns: UTC of the first sample of each piece; empty for a stream.
    """

    header: Header
    boot: str
    start_ns: int
    end_ns: int
    piece_starts_ns: tuple[int, ...] = ()


def place(headers: Sequence[Header], start_ns: int | None, piece_every_s: float | None) -> tuple[Placed, ...]:
    """
    Place files in time, in the order given.

    The first starts at *start_ns*, else at its own start, else in 1970. Those behind it start at their own start where
    *start_ns* is None and they have one, else right at the end of the one before. Only an own start that meets that end
    within half a sample makes two files one recording (same rate, channels, unit and full scale): they share a boot id.

    Pieces lie *piece_every_s* apart where it is given, else as the file has it (moved as a whole, where the file is
    moved), else one right behind the other.

    Args:
        headers: of the files.

        start_ns: UTC of the first sample of all, ns since 1970; None to use the files' own.

        piece_every_s: seconds from the start of one piece to the start of the next; None to use the files' own.

    Raises:
        ConfigError: *piece_every_s* is shorter than a piece.

        InputError: a file begins before the one that it follows, or only later files have times of their own.
    """
    placed: list[Placed] = []
    for index, header in enumerate(headers):
        before = placed[-1] if placed else None
        own_ns = header.start_ns if start_ns is None else None
        if own_ns is not None and headers[0].start_ns is None:
            # What follows 1970 by decades would be told as samples lost.
            raise InputError(
                f"{header.path}: has a time of its own, but {headers[0].path.name} before it has none "
                "(give a start time for all)"
            )
        if own_ns is not None:
            first_ns = own_ns
        elif before is not None:
            first_ns = before.end_ns
        else:
            first_ns = start_ns or 0
        if before is not None and first_ns < before.start_ns:
            raise InputError(
                f"{header.path}: begins before {before.header.path.name}, which it follows "
                "(give the files in order of time, or a start time for all)"
            )
        boot = f"{index}-{header.path.name}"
        if before is not None and own_ns is not None and _continues(before, header):
            boot = before.boot
        placed.append(_place_one(header, boot, first_ns, piece_every_s))
    return tuple(placed)


def _place_one(header: Header, boot: str, start_ns: int, piece_every_s: float | None) -> Placed:
    span_s = header.length / header.rate_hz
    if not header.pieces:
        return Placed(header, boot, start_ns, start_ns + round(span_s * 1e9))
    if piece_every_s is not None and piece_every_s < span_s:
        raise ConfigError(
            f"{header.path}: pieces of {span_s:g} s cannot start every {piece_every_s:g} s (give a longer time)"
        )
    if header.piece_starts_ns and piece_every_s is None:
        starts = tuple(start_ns + own_ns - header.piece_starts_ns[0] for own_ns in header.piece_starts_ns)
        return Placed(header, boot, start_ns, starts[-1] + round(span_s * 1e9), starts)
    every_s = span_s if piece_every_s is None else piece_every_s
    starts = tuple(start_ns + round(number * every_s * 1e9) for number in range(header.pieces))
    return Placed(header, boot, start_ns, start_ns + round(header.pieces * every_s * 1e9), starts)


def _continues(before: Placed, header: Header) -> bool:
    last = before.header
    same = (
        last.rate_hz == header.rate_hz
        and last.channels == header.channels
        and last.unit == header.unit
        and last.full_scale == header.full_scale
        and not last.pieces
        and not header.pieces
    )
    return same and header.start_ns is not None and abs(header.start_ns - before.end_ns) <= 0.5e9 / header.rate_hz
