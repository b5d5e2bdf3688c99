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
            "LOITERWISE_DATABASE_URL": "postgresql://someone:secret@db/loiterwise",
            "LOITERWISE_LOG_STORE_URL": "s3://bucket/logs",
            "LOITERWISE_ANSWER_WAIT_S": "2.5",
            "LOITERWISE_JOB_WORKERS": "0",
            "LOITERWISE_JOB_SECONDS": "60",
            "LOITERWISE_JOB_MEMORY_BYTES": "1000000000",
            "LOITERWISE_JOB_ATTEMPTS": "2",
            "LOITERWISE_QUEUE_LIMIT": "7",
            "LOITERWISE_LOG_DAYS": "30",
            "LOITERWISE_RESULT_DAYS": "365",
        }
    )
    assert config == Config(
        access=Access.KEYS,
        key=KEY,
        data=Path("/data"),
        max_upload_bytes=1000,
        max_decoded_bytes=2000,
        min_upload_rate=10,
        upload_grace_s=0.5,
        reductions_at_once=1,
        wait_s=0.0,
        log_level="DEBUG",
        bind="::1",
        workers=3,
        threads=5,
        database_url="postgresql://someone:secret@db/loiterwise",
        log_store_url="s3://bucket/logs",
        answer_wait_s=2.5,
        job_workers=0,
        job_seconds=60.0,
        job_memory_bytes=1_000_000_000,
        job_attempts=2,
        queue_limit=7,
        log_days=30.0,
        result_days=365.0,
    )
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
        ("DATABASE_URL", "mysql://db/loiterwise"),
        ("DATABASE_URL", "loiterwise.sqlite"),
        ("JOB_WORKERS", "-1"),
        ("JOB_SECONDS", "0"),
        ("JOB_ATTEMPTS", "0"),
        ("QUEUE_LIMIT", "0"),
        ("LOG_DAYS", "0"),
        ("LOG_DAYS", "inf"),
        ("RESULT_DAYS", "never"),
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


def test_a_password_in_a_url_is_not_repeated() -> None:
    with pytest.raises(ConfigurationWrong) as caught:
        config_from_environment({"LOITERWISE_DATABASE_URL": "oracle://me:secret@db"})
    assert "secret" not in str(caught.value)
    config = Config(database_url="postgresql://me:secret@db", log_store_url="s3://me:secret@store")
    assert "secret" not in repr(config)


def test_what_is_kept_needs_a_place() -> None:
    assert not Config().keeps
    assert Config(data=Path("/data")).keeps
    assert Config(data=Path("/data")).folder == Path("/data")
    by_url = Config(database_url="postgresql://db/loiterwise")
    assert by_url.keeps
    assert by_url.folder == Path("loiterwise-data")


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
