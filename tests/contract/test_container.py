"""What can be known of the container without building it."""

import re
import tomllib
from pathlib import Path

import pytest
from packaging.requirements import Requirement

from service.config import PREFIX, Access, config_from_environment, listen_address, variable_of

ROOT = Path(__file__).parents[2]
LOCK = (ROOT / "requirements.lock").read_text()
DOCKERFILE = (ROOT / "Dockerfile").read_text()
PROJECT = tomllib.loads((ROOT / "pyproject.toml").read_text())["project"]
LOCKED = dict(re.findall(r"^([a-z0-9-]+)==(\S+)", LOCK, re.MULTILINE))


@pytest.mark.parametrize("text", [*PROJECT["dependencies"], *PROJECT["optional-dependencies"]["build"]])
def test_the_lock_fits_what_the_project_asks_for(text: str) -> None:
    wanted = Requirement(text)
    assert wanted.specifier.contains(LOCKED[wanted.name.lower()])


def test_every_locked_file_has_its_hash_and_no_test_tool_is_among_them() -> None:
    entries = re.split(r"^(?=[a-z0-9-]+==)", LOCK, flags=re.MULTILINE)[1:]
    assert len(entries) == len(LOCKED)
    assert all("--hash=sha256:" in entry for entry in entries)
    assert not {"pytest", "hypothesis", "ruff", "mypy"} & set(LOCKED)


def test_both_stages_stand_on_the_given_base_and_the_second_has_no_rights() -> None:
    assert DOCKERFILE.startswith("ARG BASE_IMAGE=")
    assert re.findall(r"^FROM (\S+)", DOCKERFILE, re.MULTILINE) == ["${BASE_IMAGE}", "${BASE_IMAGE}"]
    final = DOCKERFILE.rpartition("FROM ")[2]
    assert re.search(r"^USER (?!0\b|root\b)", final, re.MULTILINE)
    assert "HEALTHCHECK" in final


def test_its_environment_means_what_it_should() -> None:
    given = dict(re.findall(r"^\s*(?:ENV )?((?:LOITERWISE_\w+|PORT))=(\S+)", DOCKERFILE, re.MULTILINE))
    known = {variable_of(name) for name in ("access", "key", "data", "bind")}
    assert {name for name in given if name.startswith(PREFIX)} <= known
    with_key = given | {"LOITERWISE_KEY": "k" * 16}
    config = config_from_environment(with_key)
    assert config.access is Access.KEYS
    assert config.data == Path("/data")
    assert listen_address(config, with_key) == "0.0.0.0:8000"
