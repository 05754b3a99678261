"""Passwords and tokens: the configuration names the place where each stands, and they are read when they are used."""

import os
import re
from collections.abc import Mapping
from dataclasses import dataclass
from pathlib import Path
from typing import Self

from pydantic import GetCoreSchemaHandler, GetJsonSchemaHandler
from pydantic.json_schema import JsonSchemaValue
from pydantic_core import CoreSchema, core_schema

from humbell.model.errors import ConfigError

_FORMS = "${env:NAME}, ${file:/PATH} or ${credential:NAME}"
# Names of variables: POSIX.1-2017, 8.1. Names of credentials are file names; a path in one would leave the directory.
_PATTERN = (
    r"^\$\{(env:[A-Za-z_][A-Za-z0-9_]*"
    r"|file:/[^{}\x00-\x1f]+"
    r"|credential:[A-Za-z0-9_][A-Za-z0-9_.@-]*)\}$"
)
_READABLE_BY_ALL = 0o004


@dataclass(frozen=True, slots=True)
class Secret:
    """
    The place of one secret. Never holds the secret itself, so it may be printed, logged and hashed.

    Args:
        reference: ``${env:NAME}`` (a variable of the environment), ``${file:/PATH}`` (a file) or
            ``${credential:NAME}`` (a credential that systemd passes to the service).

    Raises:
        ValueError: *reference* has another form. The message does not repeat it: it may be a password.
    """

    reference: str

    def __post_init__(self) -> None:
        """Refuse what is no reference."""
        if not isinstance(self.reference, str) or not re.fullmatch(_PATTERN, self.reference):
            raise ValueError(f"secrets stand outside this file (write {_FORMS})")

    def __str__(self) -> str:
        """Return the reference."""
        return self.reference

    def reveal(self, environ: Mapping[str, str]) -> str:
        """
        Read the secret.

        Args:
            environ: the variables of the environment.

        Returns:
            The secret, without the line end that editors put at the end of a file.

        Raises:
            ConfigError: it is not there, is empty, cannot be read, or stands in a file that everybody may read.
        """
        kind, _, name = self.reference[2:-1].partition(":")
        if kind == "env":
            secret = environ.get(name)
            if secret is None:
                raise self._error(f"the environment has no variable {name} (set it before the start)")
        elif kind == "file":
            secret = self._read(Path(name), f"write the secret into {name} and chmod 600 it")
        else:
            directory = environ.get("CREDENTIALS_DIRECTORY")
            advice = f"add LoadCredential={name}:/PATH to the systemd unit"
            if not directory:
                raise self._error(f"systemd has passed no credentials ({advice})")
            secret = self._read(Path(directory, name), advice)
        if not secret:
            raise self._error("the secret is empty (write it there)")
        return secret

    def _read(self, path: Path, advice: str) -> str:
        try:
            with path.open("rb") as file:
                mode = os.fstat(file.fileno()).st_mode
                # systemd guards the credentials' directory itself.
                if self.reference.startswith("${file:") and mode & _READABLE_BY_ALL:
                    raise self._error(f"everybody may read {path} (chmod 600 {path})")
                text = file.read().decode()
        except OSError as error:
            reason = (error.strerror or "unreadable").lower()
            raise self._error(f"{path} cannot be read: {reason} ({advice})") from None
        except UnicodeDecodeError:
            raise self._error(f"{path} holds no text (write the secret as UTF-8)") from None
        return re.sub(r"\r?\n\Z", "", text)

    def _error(self, text: str) -> ConfigError:
        return ConfigError(f"{self.reference}: {text}")

    @classmethod
    def _validated(cls, value: object) -> Self:
        # Not left to the type str: its message would show what stands there.
        return value if isinstance(value, cls) else cls(value)  # type: ignore[arg-type]

    @classmethod
    def __get_pydantic_core_schema__(cls, source: object, handler: GetCoreSchemaHandler) -> CoreSchema:
        """Return the schema by which pydantic reads a reference and writes it back."""
        return core_schema.no_info_plain_validator_function(
            cls._validated, serialization=core_schema.to_string_ser_schema()
        )

    @classmethod
    def __get_pydantic_json_schema__(cls, schema: CoreSchema, handler: GetJsonSchemaHandler) -> JsonSchemaValue:
        """Return the JSON Schema for editors."""
        return {"type": "string", "pattern": _PATTERN}
