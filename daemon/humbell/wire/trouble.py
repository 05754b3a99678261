"""Why an MQTT link does not work, in one plain line: what is wrong and what to do. Pure."""

import errno
import socket
import ssl
from collections.abc import Iterable
from dataclasses import dataclass

from humbell.model import ConfigError
from humbell.wire.broker import BrokerSettings
from humbell.wire.events import Ended, Reason


@dataclass(frozen=True, slots=True)
class Trouble:
    """
    Why a link does not work.

    Args:
        text: one line.

        patient: only a person can cure it, so asking often is of no use.

        unexplained: a connection that stood has broken, and nobody has said why.
    """

    text: str
    patient: bool = False
    unexplained: bool = False


NO_ROOM = Trouble("blocks come in faster than they are measured, so the broker has to keep them (look at the load)")

# OpenSSL, x509_vfy.h: X509_V_ERR_*.
_NOT_YET_VALID, _EXPIRED, _OTHER_HOST, _OTHER_ADDRESS = 9, 10, 62, 64
_UNKNOWN_ISSUER = {2, 7, 18, 19, 20, 21, 30}

# What a broker tells in the TLS handshake or, from TLS 1.3 on, right after it (RFC 8446, section 6.2), by a part of
# OpenSSL's name for it.
_ALERTS = {
    "CERTIFICATE_REQUIRED": "the broker wants a certificate of ours (give tls.certificate and tls.key)",
    "UNKNOWN_CA": "the broker does not know the authority of our certificate (have it issued by one that it knows)",
    "CERTIFICATE_EXPIRED": "our certificate has expired (renew it)",
    "CERTIFICATE_REVOKED": "our certificate has been revoked (have a new one issued)",
    "BAD_CERTIFICATE": "the broker does not take our certificate (its log says why)",
    "CERTIFICATE_UNKNOWN": "the broker does not take our certificate (its log says why)",
    "ACCESS_DENIED": "the broker does not let our certificate in (allow it there)",
    "HANDSHAKE_FAILURE": "the broker breaks off the TLS handshake (it may want a certificate of ours)",
    "PROTOCOL_VERSION": "the broker speaks no TLS 1.2 or newer (update it)",
    "WRONG_VERSION_NUMBER": "no TLS is spoken there (correct port, or leave out tls)",
    "RECORD_LAYER_FAILURE": "no TLS is spoken there (correct port, or leave out tls)",
}

_NO_WAY = {errno.ENETUNREACH, errno.EHOSTUNREACH, errno.ENETDOWN, errno.EHOSTDOWN}


def of_connecting(error: Exception, settings: BrokerSettings) -> Trouble:
    """Return what it means that connecting raised *error*."""
    at = settings.address
    if isinstance(error, ConfigError):
        return Trouble(" ".join(error.problems), patient=True)
    if isinstance(error, ssl.SSLCertVerificationError):
        return Trouble(_distrust(error, settings), patient=True)
    if isinstance(error, OSError) and (text := _unreached(error, settings)):
        return Trouble(text)
    if isinstance(error, ConnectionError | ssl.SSLError):
        if said := _alert(str(error)):
            return Trouble(f"{at}: {said}", patient=True)
        return Trouble(f"{at}: the connection closes before TLS stands (TLS may not be spoken there: correct port)")
    return Trouble(f"connecting to {at} fails: {type(error).__name__}: {error}")


def refused(reason: Reason, settings: BrokerSettings, client_id: str) -> Trouble:
    """Return what it means that the broker answered CONNECT with *reason*."""
    at = settings.address
    match reason.code:
        case 0x84 | 0x01:
            return Trouble(f"{at}: the broker speaks no MQTT 5 (update it)", patient=True)
        case 0x85:
            return Trouble(f"{at}: the broker does not take the client id {client_id} (allow it there)", patient=True)
        case 0x86 | 0x87 | 0x8C:
            return Trouble(f"{at}: {_not_let_in(settings)}: {reason.name.lower()} {_remedy(settings)}", patient=True)
        case 0x8A:
            return Trouble(f"{at}: the broker has banned us (lift that there)", patient=True)
        case 0x88 | 0x89 | 0x97 | 0x9F:
            return Trouble(f"{at}: the broker is busy: {reason.name.lower()} (raise its limits if it stays so)")
    return Trouble(f"{at}: the broker refuses us: {reason.name.lower()} (its log says more)")


def lost(detail: str, settings: BrokerSettings) -> Trouble:
    """Return what it means that the connection ended before the broker had answered."""
    at = settings.address
    if said := _alert(detail):
        return Trouble(f"{at}: {said}", patient=True)
    if settings.tls is None:
        advice = "it may want TLS: give tls"
    elif settings.tls.certificate is None:
        advice = "it may want a certificate of ours: give tls.certificate and tls.key"
    else:
        advice = "its log says more"
    return Trouble(f"{at}: the broker closed the connection without an answer ({advice})")


def ended(event: Ended, settings: BrokerSettings, client_id: str) -> Trouble:
    """Return what it means that a connection that stood has ended."""
    at = settings.address
    if event.reason is None:
        detail = f": {event.detail}" if event.detail else ""
        return Trouble(f"{at}: the connection broke{detail} (look at the broker)", unexplained=True)
    match event.reason.code:
        case 0x8E:
            text = f"{at}: another client has the same id, {client_id} (give each node an id of its own)"
            return Trouble(text, patient=True)
        case 0x8B:
            return Trouble(f"{at}: the broker is shutting down (start it again)")
        case 0x95:
            return Trouble(f"{at}: a message was too large for the broker (raise its largest packet size)")
        case 0x87 | 0x98:
            text = f"{at}: the broker has thrown us out: {event.reason.name.lower()} (its log says more)"
            return Trouble(text, patient=True)
    return Trouble(f"{at}: the broker ended the connection: {event.reason.name.lower()} (its log says more)")


def habit(settings: BrokerSettings, client_id: str) -> Trouble:
    """Return what it means that connections break again and again."""
    text = f"the connection breaks again and again (look whether another client has the same id, {client_id})"
    return Trouble(f"{settings.address}: {text}", patient=True)


def silent(what: str, after_s: float, settings: BrokerSettings) -> Trouble:
    """Return what it means that the broker kept silent about *what* for *after_s*."""
    return Trouble(f"{settings.address}: no {what} within {after_s:g} s (look at the network, then at the broker)")


def not_subscribed(denied: Iterable[tuple[str, Reason]], settings: BrokerSettings) -> str:
    """Return what to do about the topics in *denied*; empty where there are none."""
    found = dict(denied)
    if not found:
        return ""
    topics = ", ".join(sorted(found))
    reasons = ", ".join(sorted({reason.name.lower() for reason in found.values()}))
    who = f"user {settings.user!r}" if settings.user else "this client"
    return f"{settings.address}: the broker denies us {topics}: {reasons} (let {who} subscribe to it there)"


def _not_let_in(settings: BrokerSettings) -> str:
    if settings.user:
        return f"the broker does not let in user {settings.user!r}"
    if settings.tls and settings.tls.certificate:
        return "the broker does not let in our certificate"
    return "the broker lets nobody in without a user"


def _remedy(settings: BrokerSettings) -> str:
    if settings.user:
        return "(correct user and password)"
    return "(allow it there)" if settings.tls and settings.tls.certificate else "(give user and password)"


def _unreached(error: OSError, settings: BrokerSettings) -> str:
    at = settings.address
    if isinstance(error, ConnectionRefusedError):
        return f"nothing listens at {at} (start the broker, or correct host and port)"
    if isinstance(error, socket.gaierror):
        return f"the name {settings.host!r} is not known here (correct host, or mend the name service)"
    if isinstance(error, TimeoutError):
        return f"{at} does not answer (look at network and firewall, host and port)"
    if error.errno in _NO_WAY:
        return f"no way leads to {at} (look at cable, address and gateway)"
    return ""


def _distrust(error: ssl.SSLCertVerificationError, settings: BrokerSettings) -> str:
    at, code = settings.address, error.verify_code
    ca = settings.tls.ca if settings.tls else None
    if code == _EXPIRED:
        return f"{at}: the broker's certificate has expired (renew it, or set the clock of this computer)"
    if code == _NOT_YET_VALID:
        return f"{at}: the broker's certificate is not valid yet (set the clock of this computer)"
    if code in {_OTHER_HOST, _OTHER_ADDRESS}:
        return f"{at}: the broker's certificate is not for {settings.host} (correct host, or add it to the certificate)"
    if code in _UNKNOWN_ISSUER:
        return f"{at}: the broker's certificate does not come from an authority in {ca} (correct tls.ca)"
    return f"{at}: the broker's certificate is not to be trusted: {error.verify_message} (renew it)"


def _alert(detail: str) -> str:
    return next((said for part, said in _ALERTS.items() if part in detail.upper().replace(" ", "_")), "")
