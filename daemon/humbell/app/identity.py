"""What tells this computer from others."""

import socket
from pathlib import Path

# Raspberry Pi and other device-tree boards; the second is made at the first boot of any Linux.
_SERIALS = (Path("/sys/firmware/devicetree/base/serial-number"), Path("/etc/machine-id"))


def read_serial() -> str:
    """Return the computer's serial number, else its machine id, else its host name."""
    for path in _SERIALS:
        try:
            serial = path.read_text().strip("\0 \n")
        except OSError:
            continue
        if serial:
            return serial
    return socket.gethostname()
