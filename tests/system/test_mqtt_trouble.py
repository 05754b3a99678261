"""What a user reads when a link does not work: one line that says what is wrong and what to do."""

import json
import shutil
import subprocess
from collections.abc import Iterator
from dataclasses import dataclass
from pathlib import Path

import pytest

from humbell.model import Secret
from humbell.wire import BrokerSettings, RefusedError, TlsSettings, encode
from system.brokers import Mosquitto, free_port, mosquitto, wait_for
from system.certificates import Authority
from system.feeding import WITHIN_S, block, listening, numbers, read

PASSWORD = Secret("${env:BROKER_PASSWORD}")
ACL_PLUGIN = "mosquitto_dynamic_security.so"  # comes with mosquitto; its access lists alone deny no subscription


@dataclass(frozen=True)
class Site:
    """
    Certificates of one site.

    Args:
        ours: the authority that issued them.

        theirs: another one of the same name.

        server: certificate and key of a broker.

        client: certificate and key of a node.
    """

    ours: Authority
    theirs: Authority
    server: tuple[Path, Path]
    client: tuple[Path, Path]


@pytest.fixture(scope="module")
def site(tmp_path_factory: pytest.TempPathFactory) -> Site:
    """Certificates for all tests of this file."""
    folder = tmp_path_factory.mktemp("certificates")
    ours, theirs = Authority(folder / "ours", "Site CA"), Authority(folder / "theirs", "Site CA")
    return Site(ours, theirs, ours.issue("broker", "server"), ours.issue("node-1", "client"))


def tls_lines(site: Site, server: tuple[Path, Path] | None = None) -> tuple[str, ...]:
    """Return the configuration of a broker that wants client certificates."""
    certificate, key = server or site.server
    return (
        f"cafile {site.ours.certificate}",
        f"certfile {certificate}",
        f"keyfile {key}",
        "require_certificate true",
        "use_identity_as_username true",
        "allow_anonymous false",
    )


def tls(port: int, site: Site, ca: Path | None = None, client: tuple[Path, Path] | None = None) -> BrokerSettings:
    certificate, key = client or site.client
    given = TlsSettings(ca=ca or site.ours.certificate, certificate=certificate, key=key)
    return BrokerSettings(host="127.0.0.1", port=port, tls=given)


@pytest.fixture
def tls_broker(tmp_path: Path, site: Site) -> Iterator[Mosquitto]:
    """A broker that wants client certificates."""
    with mosquitto(tmp_path / "broker", *tls_lines(site)) as running:
        yield running


def trouble(settings: BrokerSettings, environ: dict[str, str] | None = None) -> str:
    """Return what is told of a link that does not come to stand, without the address."""
    with listening({"local": settings}, environ=environ) as node:
        wait_for(lambda: node.trouble, WITHIN_S, "the trouble is told")
        assert not node.ready()
        text = node.trouble
        assert [one["trouble"] for one in node.told("mqtt_lost")] == [text.removeprefix("brokers.local: ")]
        assert text.isprintable()
    return text.removeprefix(f"brokers.local: {settings.address}: ")


def test_blocks_come_over_tls_with_certificates_on_both_sides(tls_broker: Mosquitto, site: Site) -> None:
    """The broker proves what it is, and knows the node by its certificate."""
    with listening({"local": tls(tls_broker.port, site)}) as node:
        wait_for(node.ready, WITHIN_S, "subscribed")
        assert node.trouble == ""
        link = node.hub.link("local")
        assert link is not None
        for seq in range(20):
            link.publish("humbell/blocks/wifi-1", encode(block(seq)))
        assert numbers(read(node.sources["wifi-1"], 20)) == list(range(20))
    assert "u'node-1'" in tls_broker.log


def test_another_authority_is_not_trusted(tls_broker: Mosquitto, site: Site) -> None:
    """Even one of the same name."""
    ca = site.theirs.certificate
    assert trouble(tls(tls_broker.port, site, ca=ca)) == (
        f"the broker's certificate does not come from an authority in {ca} (correct tls.ca)"
    )


def test_a_node_without_a_certificate_is_told_to_have_one(tls_broker: Mosquitto, site: Site) -> None:
    """The handshake succeeds as the node sees it (TLS 1.3); the reason comes later."""
    settings = BrokerSettings(host="127.0.0.1", port=tls_broker.port, tls=TlsSettings(ca=site.ours.certificate))
    assert trouble(settings) == "the broker wants a certificate of ours (give tls.certificate and tls.key)"


def test_a_node_with_a_certificate_from_elsewhere_is_told_so(tls_broker: Mosquitto, site: Site) -> None:
    """The broker's authority did not issue it."""
    client = site.theirs.issue("node-1", "client")
    assert trouble(tls(tls_broker.port, site, client=client)) in {
        "the broker does not know the authority of our certificate (have it issued by one that it knows)",
        "the broker does not take our certificate (its log says why)",
    }


def test_a_certificate_of_ours_that_has_expired_is_told(tls_broker: Mosquitto, site: Site) -> None:
    """The broker says so itself."""
    client = site.ours.issue("node-2", "client", expired=True)
    assert trouble(tls(tls_broker.port, site, client=client)) == "our certificate has expired (renew it)"


@pytest.mark.parametrize(
    ("kind", "expired", "text"),
    [
        ("server", True, "the broker's certificate has expired (renew it, or set the clock of this computer)"),
        (
            "elsewhere",
            False,
            "the broker's certificate is not for 127.0.0.1 (correct host, or add it to the certificate)",
        ),
    ],
)
def test_a_broker_with_the_wrong_certificate_is_refused(
    tmp_path: Path, site: Site, kind: str, text: str, *, expired: bool
) -> None:
    """Expired, or made for another host."""
    server = site.ours.issue(f"{kind}-{expired}", kind, expired=expired)
    with mosquitto(tmp_path / "broker", *tls_lines(site, server)) as broker:
        assert trouble(tls(broker.port, site)) == text


def test_files_that_cannot_be_used_are_named(tls_broker: Mosquitto, site: Site, tmp_path: Path) -> None:
    """Before anything is sent."""
    where = "brokers.local: "
    missing = tmp_path / "none.crt"
    assert trouble(tls(tls_broker.port, site, ca=missing)) == (
        f"{where}tls.ca: {missing} cannot be used: no such file or directory (give a PEM file of certificates)"
    )
    mixed = (site.client[0], site.server[1])
    assert trouble(tls(tls_broker.port, site, client=mixed)) == (
        f"{where}tls.certificate: {mixed[0]} and {mixed[1]} cannot be used: key values mismatch "
        "(give a certificate and its key without a pass phrase, readable by this service)"
    )


def test_tls_on_one_side_alone_is_told(tls_broker: Mosquitto, site: Site, tmp_path: Path) -> None:
    """Neither side says so; what is likely is told."""
    assert trouble(BrokerSettings(host="127.0.0.1", port=tls_broker.port)) == (
        "the broker closed the connection without an answer (it may want TLS: give tls)"
    )
    with mosquitto(tmp_path / "plain") as broker:
        assert "TLS" in trouble(tls(broker.port, site))


@pytest.fixture
def password_broker(tmp_path: Path) -> Iterator[Mosquitto]:
    """A broker that wants user and password."""
    passwords = tmp_path / "passwords"
    passwords.write_text("node-1:right\n")
    passwords.chmod(0o600)
    program = shutil.which("mosquitto_passwd")
    assert program is not None
    subprocess.run([program, "-U", passwords], check=True)
    with mosquitto(tmp_path / "broker", "allow_anonymous false", f"password_file {passwords}") as running:
        yield running


def test_user_and_password_let_in_or_not(password_broker: Mosquitto) -> None:
    """The right password lets in; the wrong one, none and a missing secret are told, and no password ever is."""
    settings = BrokerSettings(host="127.0.0.1", port=password_broker.port, user="node-1", password=PASSWORD)
    with listening({"local": settings}, environ={"BROKER_PASSWORD": "right"}) as node:
        wait_for(node.ready, WITHIN_S, "subscribed")
    text = trouble(settings, {"BROKER_PASSWORD": "hunter2"})
    assert text == "the broker does not let in user 'node-1': not authorized (correct user and password)"
    assert trouble(settings, {}).startswith("brokers.local: ${env:BROKER_PASSWORD}: the environment has no variable")
    nobody = BrokerSettings(host="127.0.0.1", port=password_broker.port)
    assert trouble(nobody) == "the broker lets nobody in without a user: not authorized (give user and password)"


def test_a_broker_out_of_reach_is_told() -> None:
    """Nothing listens; or the name is not known."""
    port = free_port()
    assert trouble(BrokerSettings(host="127.0.0.1", port=port)) == (
        f"brokers.local: nothing listens at 127.0.0.1:{port} (start the broker, or correct host and port)"
    )
    assert trouble(BrokerSettings(host="broker.invalid")) == (
        "brokers.local: the name 'broker.invalid' is not known here (correct host, or mend the name service)"
    )


def denying(tmp_path: Path, *denied: str) -> tuple[str, ...]:
    """Return the configuration of a broker that lets everybody in, and nobody do what is *denied*."""
    access = {
        name: name not in denied for name in ("publishClientSend", "publishClientReceive", "subscribe", "unsubscribe")
    }
    lists = tmp_path / "access.json"
    lists.write_text(json.dumps({"defaultACLAccess": access, "clients": [], "groups": [], "roles": []}))
    plugin = next(Path("/usr/lib").rglob(ACL_PLUGIN))
    return "allow_anonymous true", f"plugin {plugin}", f"plugin_opt_config_file {lists}"


def test_a_denied_subscription_is_told(tmp_path: Path) -> None:
    """The link stands, and says which topic it does not get: the only sign of it in MQTT is a reason code."""
    with (
        mosquitto(tmp_path / "broker", *denying(tmp_path, "subscribe")) as broker,
        listening(broker.port, {"wifi-1": {}, "wifi-2": {}}) as node,
    ):
        wait_for(lambda: node.trouble, WITHIN_S, "the trouble is told")
        topics = "humbell/blocks/wifi-1, humbell/blocks/wifi-2"
        expected = f"denies us {topics}: not authorized (let this client subscribe to it there)"
        assert node.trouble == f"brokers.local: 127.0.0.1:{broker.port}: the broker {expected}"
        assert node.ready()
        assert len(node.told("mqtt_denied")) == 1


def test_a_denied_message_of_ours_is_refused_for_good(tmp_path: Path) -> None:
    """With MQTT 3 it would look published."""
    with (
        mosquitto(tmp_path / "broker", *denying(tmp_path, "publishClientSend")) as broker,
        listening(broker.port) as node,
    ):
        wait_for(node.ready, WITHIN_S, "subscribed")
        link = node.hub.link("local")
        assert link is not None
        for topic, reason in (("a/b", "not authorized"), ("a/+", "wildcards"), ("", "the topic is empty")):
            with pytest.raises(RefusedError, match=reason):
                link.publish(topic, b"x").result(WITHIN_S)
        assert node.ready()
