from pathlib import Path

import pytest
from hypothesis import given
from hypothesis import strategies as st
from pydantic import BaseModel, ConfigDict, TypeAdapter, ValidationError

from humbell.model import ConfigError
from humbell.model.secret import Secret

ADVICE = "secrets stand outside this file (write ${env:NAME}, ${file:/PATH} or ${credential:NAME})"


class Broker(BaseModel):
    """A model with a secret."""

    model_config = ConfigDict(frozen=True, hide_input_in_errors=True)

    password: Secret


def refusal(reference: str, environ: dict[str, str]) -> str:
    with pytest.raises(ConfigError) as caught:
        Secret(reference).reveal(environ)
    (text,) = caught.value.problems
    return text


def test_a_secret_comes_from_the_environment_when_it_is_used() -> None:
    """The variable is read at each use, not when the configuration is read."""
    secret = Secret("${env:MQTT_PASSWORD}")
    assert secret.reveal({"MQTT_PASSWORD": "one"}) == "one"
    assert secret.reveal({"MQTT_PASSWORD": "two\n"}) == "two\n"


@pytest.mark.parametrize(
    ("content", "expected"),
    [("s3cret", "s3cret"), ("s3cret\n", "s3cret"), ("s3cret\r\n", "s3cret"), ("s\n\n", "s\n"), (" sö ", " sö ")],
)
def test_a_secret_comes_from_a_file_without_its_line_end(tmp_path: Path, content: str, expected: str) -> None:
    """One line end at the end of the file is the editor's; all else is the secret."""
    path = tmp_path / "token"
    path.write_bytes(content.encode())
    path.chmod(0o640)
    assert Secret(f"${{file:{path}}}").reveal({}) == expected


def test_a_secret_comes_from_the_credentials_that_systemd_passes(tmp_path: Path) -> None:
    """systemd.exec(5): the file NAME in $CREDENTIALS_DIRECTORY, whose access systemd guards itself."""
    (tmp_path / "mqtt").write_text("s3cret\n")
    (tmp_path / "mqtt").chmod(0o444)
    assert Secret("${credential:mqtt}").reveal({"CREDENTIALS_DIRECTORY": str(tmp_path)}) == "s3cret"


def test_a_file_that_everybody_may_read_is_refused(tmp_path: Path) -> None:
    """A secret that others on the computer can read is none."""
    path = tmp_path / "token"
    path.write_text("s3cret")
    path.chmod(0o604)
    reference = f"${{file:{path}}}"
    assert refusal(reference, {}) == f"{reference}: everybody may read {path} (chmod 600 {path})"


def test_a_secret_that_is_not_there_is_told_with_what_to_do(tmp_path: Path) -> None:
    """The message names the reference, what is missing, and the remedy."""
    credential = "add LoadCredential=mqtt:/PATH to the systemd unit"
    assert refusal("${env:TOKEN}", {}) == (
        "${env:TOKEN}: the environment has no variable TOKEN (set it before the start)"
    )
    path = tmp_path / "none"
    missing = "cannot be read: no such file or directory"
    assert refusal(f"${{file:{path}}}", {}) == (
        f"${{file:{path}}}: {path} {missing} (write the secret into {path} and chmod 600 it)"
    )
    assert refusal("${credential:mqtt}", {}) == (
        f"${{credential:mqtt}}: systemd has passed no credentials ({credential})"
    )
    assert refusal("${credential:mqtt}", {"CREDENTIALS_DIRECTORY": str(tmp_path)}) == (
        f"${{credential:mqtt}}: {tmp_path / 'mqtt'} {missing} ({credential})"
    )


def test_an_empty_secret_is_refused(tmp_path: Path) -> None:
    """Nobody means an empty password: the variable or file has not been filled."""
    path = tmp_path / "token"
    path.write_text("\n")
    path.chmod(0o600)
    assert refusal(f"${{file:{path}}}", {}).endswith(": the secret is empty (write it there)")
    assert refusal("${env:TOKEN}", {"TOKEN": ""}).endswith(": the secret is empty (write it there)")


def test_a_file_that_is_no_text_is_refused_without_showing_it(tmp_path: Path) -> None:
    """The message of a decoding error would hold a part of the secret."""
    path = tmp_path / "token"
    path.write_bytes(b"s3cret\xff")
    path.chmod(0o600)
    with pytest.raises(ConfigError, match=r"holds no text \(write the secret as UTF-8\)") as caught:
        Secret(f"${{file:{path}}}").reveal({})
    assert caught.value.__suppress_context__
    assert "s3cret" not in str(caught.value)


@pytest.mark.parametrize(
    "literal",
    [
        *("hunter2", "", "$env:NAME", "${NAME}", "${env:}", "${env:1A}", "${env:A B}", "${evn:A}", "${env:A}x"),
        *("${env:A}\n", "${file:relative/path}", "${credential:../x}", "${credential:a/b}", "${credential:..}"),
    ],
)
def test_a_literal_is_refused_and_never_shown(literal: str) -> None:
    """Secrets stand outside of the configuration; what stands inside may be one and is not repeated."""
    with pytest.raises(ValueError, match=r"^secrets stand outside this file") as caught:
        Secret(literal)
    assert str(caught.value) == ADVICE


@given(st.text(min_size=1))
def test_text_and_repr_of_a_secret_show_the_reference_alone(value: str) -> None:
    """Reading a secret leaves no trace of it in the object."""
    secret = Secret("${env:TOKEN}")
    assert secret.reveal({"TOKEN": value}) == value
    assert str(secret) == "${env:TOKEN}"
    assert repr(secret) == "Secret(reference='${env:TOKEN}')"


def test_pydantic_reads_a_reference_and_writes_it_back() -> None:
    """A model's field of this type takes references alone, and its dump holds them."""
    broker = Broker.model_validate({"password": "${env:TOKEN}"})
    assert broker.password == Secret("${env:TOKEN}")
    assert Broker(password=broker.password) == broker
    assert hash(broker) == hash(broker.model_copy())
    assert broker.model_dump_json() == '{"password":"${env:TOKEN}"}'


@pytest.mark.parametrize("literal", ["hunter2", 12345, None, ["hunter2"]])
def test_pydantic_gives_our_advice_for_a_literal_of_any_type(literal: object) -> None:
    """A password of digits alone is read as a number, and is refused in the same words."""
    with pytest.raises(ValidationError) as caught:
        Broker.model_validate({"password": literal})
    (detail,) = caught.value.errors()
    assert detail["msg"] == f"Value error, {ADVICE}"


def test_the_schema_for_editors_holds_the_forms_of_a_reference() -> None:
    """An editor that knows the JSON Schema marks a literal at once."""
    schema = TypeAdapter(Secret).json_schema()
    assert schema["type"] == "string"
    assert set(schema) == {"type", "pattern"}
