"""Stored keys: scopes, owners who do not see one another, and the commands that make keys."""

from pathlib import Path

import pytest
from flask.testing import FlaskClient

from service.app import create_app
from service.cli import main
from service.config import Access, Config
from service.domain.kept import Scope
from tests import made
from tests.contract.conftest import FLIGHTS, KeptClient, kept_client

FIRST_KEY = "the-first-key-of-the-tests"


@pytest.fixture(scope="module")
def locked(tmp_path_factory: pytest.TempPathFactory) -> KeptClient:
    folder = tmp_path_factory.mktemp("locked")
    return kept_client(Config(access=Access.KEYS, key=FIRST_KEY, data=folder, log_level="ERROR"))


def key_of(locked: KeptClient, owner: str, *scopes: Scope) -> dict[str, str]:
    """Headers with a new key."""
    _, plain = locked.stores.keys.add(owner, "test", scopes)
    return {"Authorization": f"Bearer {plain}"}


ADMIN = {"Authorization": f"Bearer {FIRST_KEY}"}
QUICK = {"Prefer": "respond-async"}


@pytest.mark.parametrize("headers", [{}, {"Authorization": "Bearer lw_" + "x" * 43}, {"Authorization": "Bearer \xff"}])
def test_without_a_known_key(locked: KeptClient, headers: dict[str, str]) -> None:
    for path in (FLIGHTS, "/v1/aircraft", f"{FLIGHTS}/{'0' * 26}"):
        answer = locked.client.get(path, headers=headers)
        assert answer.status_code == 401
        assert answer.headers["WWW-Authenticate"].startswith("Bearer")


def test_scopes(locked: KeptClient) -> None:
    read, write = key_of(locked, "scoped", Scope.READ), key_of(locked, "scoped", Scope.WRITE)
    assert locked.client.get(FLIGHTS, headers=read).status_code == 200
    refused = locked.client.post(FLIGHTS, json=made.batch(), headers=read)
    assert (refused.status_code, refused.get_json()["type"]) == (403, "/docs#problem-scope-missing")
    for method, path in (("PUT", "/v1/aircraft/a"), ("DELETE", f"{FLIGHTS}/{'0' * 26}"), ("POST", "/v1/reductions")):
        assert locked.client.open(path, method=method, json={}, headers=read).status_code == 403
    assert locked.client.get(FLIGHTS, headers=write).status_code == 403
    assert locked.client.put("/v1/aircraft/a", json={}, headers=write).status_code == 201
    admin = key_of(locked, "scoped", Scope.ADMIN)
    assert locked.client.get("/v1/aircraft/a", headers=admin).status_code == 200
    assert locked.client.post(FLIGHTS, json=made.batch(), headers=admin | QUICK).status_code == 202
    locked.run_jobs()


def test_owners_do_not_see_one_another(locked: KeptClient) -> None:
    ours, theirs = (key_of(locked, owner, Scope.READ, Scope.WRITE) for owner in ("ours", "theirs"))
    headers = ours | QUICK | {"Idempotency-Key": "k"}
    flight = locked.client.post(f"{FLIGHTS}?aircraft=kite", json=made.batch(), headers=headers).get_json()["flight"]
    locked.run_jobs()
    assert locked.client.get(f"{FLIGHTS}/{flight}", headers=ours).status_code == 200
    calls = [
        ("GET", ""),
        ("GET", "/calibration"),
        ("GET", "/wind"),
        ("GET", "/airspeed"),
        ("GET", "/stall-margins"),
        ("GET", "/faults"),
        ("GET", "/log"),
        ("GET", "/reductions"),
        ("GET", "/reductions/1"),
        ("POST", "/reductions"),
        ("POST", "/cancel"),
        ("PUT", "/exclusion"),
        ("DELETE", "/exclusion"),
        ("DELETE", ""),
    ]
    for who in (theirs, ADMIN):
        for method, path in calls:
            body = {"reason": "x"} if path == "/exclusion" else {}
            answer = locked.client.open(f"{FLIGHTS}/{flight}{path}", method=method, json=body, headers=who)
            assert answer.status_code == 404, (method, path)
        assert locked.client.get("/v1/aircraft/kite", headers=who).status_code == 404
        assert locked.client.get("/v1/aircraft/kite/calibration", headers=who).status_code == 404
        listed = locked.client.get(f"{FLIGHTS}?aircraft=kite", headers=who).get_json()
        assert listed["items"] == []
    # keys of requests, names of aircraft and logs are each owner's own
    again = locked.client.post(
        f"{FLIGHTS}?aircraft=kite", json=made.batch(4), headers=theirs | QUICK | {"Idempotency-Key": "k"}
    )
    assert again.status_code == 202
    same_log = locked.client.post(f"{FLIGHTS}?aircraft=kite", json=made.batch(), headers=theirs | QUICK)
    assert same_log.get_json()["duplicate_of"] is None
    locked.run_jobs()


def test_a_revoked_key(locked: KeptClient) -> None:
    record, plain = locked.stores.keys.add("gone", "test", [Scope.READ])
    headers = {"Authorization": f"Bearer {plain}"}
    assert locked.client.get(FLIGHTS, headers=headers).status_code == 200
    locked.stores.keys.revoke(record.key_id)
    assert locked.client.get(FLIGHTS, headers=headers).status_code == 401


def test_what_was_kept_while_open_is_the_first_keys(tmp_path: Path) -> None:
    opened = kept_client(Config(data=tmp_path, log_level="ERROR"))
    flight = opened.added()
    client = create_app(Config(access=Access.KEYS, key=FIRST_KEY, data=tmp_path, log_level="ERROR")).test_client()
    assert client.get(f"{FLIGHTS}/{flight}").status_code == 401
    assert client.get(f"{FLIGHTS}/{flight}", headers=ADMIN).status_code == 200


def test_stored_keys_need_a_place() -> None:
    client: FlaskClient = create_app(Config(access=Access.KEYS, key=FIRST_KEY, log_level="ERROR")).test_client()
    assert client.get(FLIGHTS, headers={"Authorization": "Bearer lw_" + "x" * 43}).status_code == 401
    assert client.get(FLIGHTS, headers=ADMIN).status_code == 503


# --- commands ---------------------------------------------------------------------------------------------------------


@pytest.fixture
def folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> Path:
    monkeypatch.setenv("LOITERWISE_DATA", str(tmp_path / "data"))
    monkeypatch.setenv("LOITERWISE_ACCESS", "keys")
    monkeypatch.delenv("LOITERWISE_KEY", raising=False)
    return tmp_path / "data"


def test_keys_by_command(folder: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["keys", "add", "team", "--label", "tablet", "--scope", "read"]) == 0
    made_key = capsys.readouterr()
    plain = made_key.out.strip()
    client = kept_client(Config(access=Access.KEYS, key=FIRST_KEY, data=folder, log_level="ERROR")).client
    headers = {"Authorization": f"Bearer {plain}"}
    assert client.get(FLIGHTS, headers=headers).status_code == 200
    assert client.post(f"{FLIGHTS}", json={}, headers=headers).status_code == 403
    assert main(["keys", "list"]) == 0
    listed = capsys.readouterr().out
    key_id, owner, scopes, _, state, label = listed.strip().split("\t")
    assert (owner, scopes, state, label) == ("team", "read", "in force", "tablet")
    assert plain not in listed
    assert main(["keys", "revoke", key_id]) == 0
    assert client.get(FLIGHTS, headers=headers).status_code == 401
    assert main(["keys", "list", "--owner", "team"]) == 0
    assert "revoked" in capsys.readouterr().out
    assert main(["keys", "list", "--owner", "others"]) == 0
    assert capsys.readouterr().out == ""


@pytest.mark.usefixtures("folder")
def test_no_such_key(capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["keys", "revoke", "nothing"]) == 2
    assert capsys.readouterr().err == "loiterwise: There is no such key.\n"
    with pytest.raises(SystemExit):
        main(["keys", "add", "team", "--scope", "everything"])


def test_migrate_and_sweep(folder: Path) -> None:
    assert main(["migrate"]) == 0
    assert list(folder.glob("*.sqlite"))
    assert main(["migrate"]) == 0
    assert main(["sweep"]) == 0
