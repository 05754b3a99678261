import errno
import socket
import ssl
from pathlib import Path

import pytest
from pydantic import ValidationError

from humbell.model import ConfigError, Secret
from humbell.wire import BrokerSettings, TlsSettings, trouble
from humbell.wire.events import Ended, Reason

CA = Path("/etc/humbell/ca.crt")
PLAIN = BrokerSettings(host="broker.plant", user="node-1")
SECURE = BrokerSettings(host="broker.plant", tls=TlsSettings(ca=CA))


def test_the_port_left_out_is_that_of_the_protocol() -> None:
    """1883, and 8883 with TLS (IANA)."""
    assert PLAIN.address == "broker.plant:1883"
    assert SECURE.address == "broker.plant:8883"
    assert BrokerSettings(host="::1", port=1884).address == "[::1]:1884"
    assert PLAIN.keepalive_s == 15


@pytest.mark.parametrize(
    "wrong",
    [
        *({"host": one} for one in ("", "mqtt://broker", "a b", "user@broker", "a/b")),
        *({"port": one} for one in (0, 65536, -1, "x")),
        *({"keepalive_s": one} for one in (0, 301)),
        {"password": "${env:MQTT}"},
        {"user": "a", "password": "hunter2"},
        {"user": ""},
        {"client_id": "x"},
        {"tls": {}},
        {"tls": {"ca": "ca.crt"}},
        {"tls": {"ca": CA, "certificate": "/a.crt"}},
        {"tls": {"ca": CA, "key": "/a.key"}},
        {"tls": {"ca": CA, "verify": False}},
    ],
)
def test_settings_that_cannot_be_are_refused(wrong: dict[str, object]) -> None:
    """Half a pair, a relative path, an address for a name, a literal password; and the password is not repeated."""
    with pytest.raises(ValidationError) as caught:
        BrokerSettings.model_validate({"host": "broker", **wrong})
    assert "hunter2" not in str(caught.value)


def test_a_password_is_the_place_where_it_stands() -> None:
    """The settings never hold the secret."""
    settings = BrokerSettings.model_validate({"host": "b", "user": "u", "password": "${credential:mqtt}"})
    assert settings.password == Secret("${credential:mqtt}")


@pytest.mark.parametrize(
    ("error", "text", "patient"),
    [
        (
            ConnectionRefusedError(),
            "nothing listens at broker.plant:8883 (start the broker, or correct host and port)",
            0,
        ),
        (TimeoutError(), "broker.plant:8883 does not answer (look at network and firewall, host and port)", 0),
        (socket.gaierror(), "the name 'broker.plant' is not known here (correct host, or mend the name service)", 0),
        (OSError(errno.ENETUNREACH, "x"), "no way leads to broker.plant:8883 (look at cable, address and gateway)", 0),
        (OSError(errno.EHOSTUNREACH, "x"), "no way leads to broker.plant:8883 (look at cable, address and gateway)", 0),
        (ConfigError("${env:A}: not there (set it)"), "${env:A}: not there (set it)", 1),
        (
            ssl.SSLError(1, "[SSL: SSLV3_ALERT_CERTIFICATE_EXPIRED] sslv3 alert certificate expired"),
            "broker.plant:8883: our certificate has expired (renew it)",
            1,
        ),
        (
            ConnectionResetError(),
            "broker.plant:8883: the connection closes before TLS stands (TLS may not be spoken there: correct port)",
            0,
        ),
        (ValueError("odd"), "connecting to broker.plant:8883 fails: ValueError: odd", 0),
    ],
)
def test_why_a_connection_does_not_come_to_stand_is_told(error: Exception, text: str, patient: int) -> None:
    """One line: what is wrong and what to do."""
    told = trouble.of_connecting(error, SECURE)
    assert told.text == text
    assert told.patient is bool(patient)


@pytest.mark.parametrize(
    ("code", "part", "patient"),
    [
        (0x84, "the broker speaks no MQTT 5 (update it)", True),
        (0x85, "the broker does not take the client id humbell-1 (allow it there)", True),
        (0x86, "the broker does not let in user 'node-1': words (correct user and password)", True),
        (0x87, "the broker does not let in user 'node-1': words (correct user and password)", True),
        (0x8A, "the broker has banned us (lift that there)", True),
        (0x89, "the broker is busy: words (raise its limits if it stays so)", False),
        (0x80, "the broker refuses us: words (its log says more)", False),
    ],
)
def test_what_a_broker_answers_is_told(code: int, part: str, *, patient: bool) -> None:
    """By reason code (MQTT 5.0, section 2.4); what only a person can change is not asked for often."""
    told = trouble.refused(Reason(code, "Words"), PLAIN, "humbell-1")
    assert told.text == f"broker.plant:1883: {part}"
    assert told.patient is patient


@pytest.mark.parametrize(
    ("code", "part", "patient"),
    [
        (0x8E, "another client has the same id, humbell-1 (give each node an id of its own)", True),
        (0x8B, "the broker is shutting down (start it again)", False),
        (0x95, "a message was too large for the broker (raise its largest packet size)", False),
        (0x98, "the broker has thrown us out: words (its log says more)", True),
        (0x80, "the broker ended the connection: words (its log says more)", False),
        (None, "the connection broke: reset (look at the broker)", False),
    ],
)
def test_how_a_connection_ended_is_told(code: int | None, part: str, *, patient: bool) -> None:
    """By the broker's reason where it gave one."""
    reason = None if code is None else Reason(code, "Words")
    told = trouble.ended(Ended(reason, "reset"), PLAIN, "humbell-1")
    assert told.text == f"broker.plant:1883: {part}"
    assert told.patient is patient
    assert told.unexplained is (code is None)
