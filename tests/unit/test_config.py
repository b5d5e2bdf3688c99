"""The environment: defaults, what is read, what is refused with the variable's name."""

from pathlib import Path

import pytest

from service.config import Access, Config, ConfigurationWrong, config_from_environment, listen_address

KEY = "k" * 16


def test_nothing_set_gives_the_defaults() -> None:
    assert config_from_environment({}) == Config()
    assert config_from_environment({"LOITERWISE_WORKERS": " ", "OTHER": "x"}) == Config()


def test_everything_set() -> None:
    config = config_from_environment(
        {
            "LOITERWISE_ACCESS": "keys",
            "LOITERWISE_KEY": KEY,
            "LOITERWISE_DATA": "/data",
            "LOITERWISE_MAX_UPLOAD_BYTES": "1000",
            "LOITERWISE_MAX_DECODED_BYTES": "2000",
            "LOITERWISE_MIN_UPLOAD_RATE": "10",
            "LOITERWISE_UPLOAD_GRACE_S": "0.5",
            "LOITERWISE_REDUCTIONS_AT_ONCE": "1",
            "LOITERWISE_WAIT_S": "0",
            "LOITERWISE_LOG_LEVEL": "debug",
            "LOITERWISE_BIND": "::1",
            "LOITERWISE_WORKERS": "3",
            "LOITERWISE_THREADS": "5",
        }
    )
    assert config == Config(Access.KEYS, KEY, Path("/data"), 1000, 2000, 10, 0.5, 1, 0.0, "DEBUG", "::1", 3, 5)
    assert config.spool == Path("/data/spool")


@pytest.mark.parametrize(
    ("name", "value"),
    [
        ("ACCESS", "closed"),
        ("KEY", "short"),
        ("KEY", "with spaces in the middle"),
        ("MAX_UPLOAD_BYTES", "0"),
        ("MAX_UPLOAD_BYTES", "many"),
        ("WAIT_S", "nan"),
        ("WAIT_S", "-1"),
        ("LOG_LEVEL", "LOUD"),
    ],
)
def test_what_cannot_be_used_is_named(name: str, value: str) -> None:
    with pytest.raises(ConfigurationWrong, match=f"LOITERWISE_{name}"):
        config_from_environment({f"LOITERWISE_{name}": value})


def test_a_wrong_key_is_not_repeated() -> None:
    with pytest.raises(ConfigurationWrong) as caught:
        config_from_environment({"LOITERWISE_KEY": "secret word"})
    assert "secret" not in str(caught.value)
    assert KEY not in repr(Config(key=KEY))


def test_keys_without_a_key() -> None:
    with pytest.raises(ConfigurationWrong, match="LOITERWISE_KEY"):
        config_from_environment({"LOITERWISE_ACCESS": "keys"})


@pytest.mark.parametrize(
    ("environment", "address"),
    [
        ({}, "127.0.0.1:8000"),
        ({"PORT": "81"}, "127.0.0.1:81"),
        ({"LOITERWISE_ACCESS": "keys", "LOITERWISE_KEY": KEY}, "0.0.0.0:8000"),
        ({"LOITERWISE_BIND": "0.0.0.0", "PORT": "81"}, "0.0.0.0:81"),
        ({"LOITERWISE_BIND": "localhost:9000", "PORT": "81"}, "localhost:9000"),
        ({"LOITERWISE_BIND": "[::1]:9000"}, "[::1]:9000"),
        ({"LOITERWISE_BIND": "[::]"}, "[::]:8000"),
        ({"LOITERWISE_BIND": "::1"}, "[::1]:8000"),
    ],
)
def test_where_to_listen(environment: dict[str, str], address: str) -> None:
    assert listen_address(config_from_environment(environment), environment) == address


@pytest.mark.parametrize("environment", [{"PORT": "http"}, {"PORT": "70000"}, {"LOITERWISE_BIND": "localhost:x"}])
def test_no_port(environment: dict[str, str]) -> None:
    with pytest.raises(ConfigurationWrong):
        listen_address(config_from_environment(environment), environment)
