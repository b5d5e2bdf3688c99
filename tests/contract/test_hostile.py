"""A seeded part of the campaign of hostile bodies: `python -m tests.hostile --cases 5000` is the whole."""

from pathlib import Path

import pytest
from flask.testing import FlaskClient

from service.app import create_app
from service.config import Config
from service.domain.codes import LogFormat
from tests.hostile.bases import bases
from tests.hostile.cases import KNOWING, make_case
from tests.hostile.judge import judge, send

CASES = 240
PER_TEST = 20
SEED = 7


@pytest.fixture(scope="module")
def client(tmp_path_factory: pytest.TempPathFactory) -> FlaskClient:
    folder: Path = tmp_path_factory.mktemp("data")
    return create_app(Config(data=folder, log_level="ERROR")).test_client()


@pytest.mark.parametrize("first", range(0, CASES, PER_TEST))
def test_damaged_bodies_get_an_answer_of_the_contract(client: FlaskClient, first: int) -> None:
    for number in range(first, first + PER_TEST):
        case = make_case(SEED, number)
        try:
            judge(send(client, case))
        except AssertionError as error:
            pytest.fail(f"--seed {SEED} --only {number}: {case.name}: {error}")


def test_a_case_is_told_by_its_seed_and_number() -> None:
    assert make_case(3, 11) == make_case(3, 11)
    assert make_case(3, 11).body != make_case(4, 11).body


def test_the_cases_use_every_damage_and_reach_every_form() -> None:
    names = " ".join(make_case(SEED, number).name for number in range(900))
    missing = [name for damages in KNOWING.values() for name in damages if name not in names]
    assert missing == []


@pytest.mark.parametrize("log_format", list(LogFormat))
def test_what_is_damaged_was_sound(client: FlaskClient, log_format: LogFormat) -> None:
    """Else the campaign would only ever see the first check of a reader."""
    verdicts = []
    for content in bases(log_format)[:4]:
        answer = client.post("/v1/reductions", data=content, content_type="application/octet-stream")
        verdicts.append(judge(answer)["calibration"]["verdict"])
    assert len(verdicts) - verdicts.count("refused") >= 2
