"""Certificates made by openssl for one test run: what TLS can meet on a site, right and wrong."""

import shutil
import subprocess
from pathlib import Path

_EXTENSIONS = """
[authority]
basicConstraints = critical, CA:true
keyUsage = critical, keyCertSign, cRLSign
subjectKeyIdentifier = hash
[server]
basicConstraints = critical, CA:false
keyUsage = critical, digitalSignature
extendedKeyUsage = serverAuth
subjectAltName = DNS:localhost, IP:127.0.0.1
subjectKeyIdentifier = hash
authorityKeyIdentifier = keyid
[elsewhere]
basicConstraints = critical, CA:false
keyUsage = critical, digitalSignature
extendedKeyUsage = serverAuth
subjectAltName = DNS:elsewhere.example
subjectKeyIdentifier = hash
authorityKeyIdentifier = keyid
[client]
basicConstraints = critical, CA:false
keyUsage = critical, digitalSignature
extendedKeyUsage = clientAuth
subjectKeyIdentifier = hash
authorityKeyIdentifier = keyid
[ca]
default_ca = issue
[issue]
database = index.txt
new_certs_dir = .
default_md = sha256
policy = any
rand_serial = yes
unique_subject = no
[any]
commonName = supplied
"""
_VALID = ("20200101000000Z", "20991231235959Z")
_OVER = ("20200101000000Z", "20210101000000Z")


class Authority:
    """
    A certificate authority in a folder of its own.

    Args:
        folder: does not exist yet.

        name: its common name.
    """

    def __init__(self, folder: Path, name: str) -> None:
        folder.mkdir()
        self._folder = folder
        (folder / "index.txt").touch()
        (folder / "openssl.cnf").write_text(_EXTENSIONS)
        self.certificate = folder / "ca.crt"
        self._issue("ca", name, "authority", _VALID, "-selfsign")

    def issue(self, name: str, kind: str, *, expired: bool = False) -> tuple[Path, Path]:
        """Return certificate and key of a new ``server``, ``client``, or ``elsewhere`` (a server of another name)."""
        return self._issue(name, name, kind, _OVER if expired else _VALID)

    def _issue(self, stem: str, name: str, kind: str, valid: tuple[str, str], *more: str) -> tuple[Path, Path]:
        certificate, key, request = (self._folder / f"{stem}.{suffix}" for suffix in ("crt", "key", "csr"))
        self._openssl(
            *("req", "-new", "-newkey", "ec", "-pkeyopt", "ec_paramgen_curve:prime256v1", "-nodes", "-batch"),
            *("-subj", f"/CN={name}", "-keyout", key, "-out", request),
        )
        self._openssl(
            *("ca", "-batch", "-notext", "-config", "openssl.cnf", "-extensions", kind, "-in", request),
            *("-startdate", valid[0], "-enddate", valid[1], "-out", certificate),
            *("-keyfile", self._folder / "ca.key"),
            *(more or ("-cert", self.certificate)),
        )
        return certificate, key

    def _openssl(self, *arguments: str | Path) -> None:
        program = shutil.which("openssl")
        assert program is not None, "openssl is missing (install it)"
        done = subprocess.run([program, *arguments], cwd=self._folder, capture_output=True, text=True, check=False)
        assert done.returncode == 0, done.stderr
