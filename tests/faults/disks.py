"""Disks of a test's own: small ones, full ones, and ones that can be looked at as a power cut would leave them."""

import fcntl
import os
import shutil
import subprocess
from collections.abc import Iterator
from contextlib import contextmanager
from pathlib import Path

# linux/fs.h: _IOWR('X', 119, int) and _IOWR('X', 120, int).
_FIFREEZE, _FITHAW = 0xC0045877, 0xC0045878
_LOT = 64 * 1024


@contextmanager
def in_memory(folder: Path, size: str) -> Iterator[Path]:
    """Mount a disk of *size* in memory on *folder*."""
    with _mounted(folder, "-t", "tmpfs", "-o", f"size={size}", "tmpfs"):
        yield folder


@contextmanager
def from_image(image: Path, folder: Path) -> Iterator[Path]:
    """Mount *image* on *folder*, through a loop device; a dirty one is recovered as after a power cut."""
    with _mounted(folder, "-o", "loop", str(image)):
        yield folder


def make_image(image: Path, size_mib: int) -> None:
    """Make an image with an empty ext4 file system."""
    with image.open("wb") as file:
        file.truncate(size_mib * 2**20)
    subprocess.run(["/usr/sbin/mkfs.ext4", "-q", "-F", str(image)], check=True)


@contextmanager
def frozen(folder: Path) -> Iterator[None]:
    """
    Let all writing to the file system on *folder* wait, in the middle of whatever it is.

    An image on it is, meanwhile, what a device holds in the moment of a power cut.
    """
    handle = os.open(folder, os.O_RDONLY)
    try:
        fcntl.ioctl(handle, _FIFREEZE, 0)
        try:
            yield
        finally:
            fcntl.ioctl(handle, _FITHAW, 0)
    finally:
        os.close(handle)


def fill(folder: Path) -> Path:
    """Fill the disk on *folder* to its last byte, and return the file that did, which grows with each call."""
    path = folder / "filler"
    with path.open("ab", buffering=0) as filler:
        try:
            while filler.write(bytes(_LOT)):
                pass
        except OSError:
            return path
    raise AssertionError("a disk without an end")


def free_bytes(folder: Path) -> int:
    """Return how much room the disk on *folder* has."""
    return shutil.disk_usage(folder).free


@contextmanager
def _mounted(folder: Path, *what: str) -> Iterator[None]:
    folder.mkdir(exist_ok=True)
    subprocess.run(["/usr/bin/mount", *what, str(folder)], check=True)
    try:
        yield
    finally:
        # Lazily: what a test that failed still holds open must not keep the disk where the next run cleans up.
        subprocess.run(["/usr/bin/umount", "--lazy", str(folder)], check=True)
