"""Settings of MQTT brokers, as they stand under `brokers:` in the configuration."""

from pathlib import Path
from typing import Annotated

from pydantic import AfterValidator, BaseModel, ConfigDict, Field, model_validator

from humbell.model import Secret

# IANA: mqtt and secure-mqtt.
PORT = 1883
TLS_PORT = 8883


def _absolute(path: Path) -> Path:
    if not path.is_absolute():
        # A service's working directory is not the one in which the file was written.
        raise ValueError(f"{path} is no absolute path (write it from / on)")
    return path


_File = Annotated[Path, AfterValidator(_absolute)]


class TlsSettings(BaseModel):
    """How to trust a broker, and how to prove to it who we are."""

    model_config = ConfigDict(frozen=True, extra="forbid")

    ca: Annotated[_File, Field(description="certificates of the authorities that the broker's may come from, PEM")]
    certificate: Annotated[_File | None, Field(description="our own certificate, where the broker wants one, PEM")] = (
        None
    )
    key: Annotated[_File | None, Field(description="the key of our certificate, without a pass phrase, PEM")] = None

    @model_validator(mode="after")
    def _pair(self) -> "TlsSettings":
        if (self.certificate is None) is not (self.key is None):
            raise ValueError("certificate and key belong together (give both or neither)")
        return self


class BrokerSettings(BaseModel):
    """One MQTT broker, which must speak MQTT 5."""

    # A literal password must not come back in a message.
    model_config = ConfigDict(frozen=True, extra="forbid", hide_input_in_errors=True)

    host: Annotated[str, Field(pattern=r"^[^\s/@]+$", max_length=253, description="name or address of the broker")]
    port: Annotated[
        int | None, Field(ge=1, le=65535, description=f"its TCP port; default: {PORT}, with tls {TLS_PORT}")
    ] = None
    tls: Annotated[TlsSettings | None, Field(description="leave out only on a network of your own")] = None
    user: Annotated[str | None, Field(min_length=1, max_length=256, description="user name")] = None
    password: Annotated[Secret | None, Field(description="where the password stands")] = None
    keepalive_s: Annotated[
        int,
        Field(ge=1, le=300, description="a silent connection is tried this often; a dead one is found in twice that"),
    ] = 15

    @model_validator(mode="after")
    def _whose(self) -> "BrokerSettings":
        if self.password is not None and self.user is None:
            raise ValueError("a password needs a user (give user)")
        return self

    @property
    def port_in_force(self) -> int:
        """The port, given or not."""
        if self.port is not None:
            return self.port
        return PORT if self.tls is None else TLS_PORT

    @property
    def address(self) -> str:
        """Host and port as messages show them."""
        host = f"[{self.host}]" if ":" in self.host else self.host
        return f"{host}:{self.port_in_force}"
