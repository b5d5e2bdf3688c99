"""A seeded part of the campaign of hostile bodies: `python -m tests.hostile --cases 5000` is the whole."""

from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
from flask.testing import FlaskClient

from service.app import create_app
from service.config import Config
from service.domain.codes import LogFormat
from service.domain.settings import Settings, Window
from service.pipeline import MOST_LOITERS, reduce_flight
from tests.hostile.bases import bases, flights
from tests.hostile.bytes_damage import DAMAGES, Damage
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


ALL_DAMAGES = [
    (log_format, name, damage)
    for log_format in LogFormat
    for name, damage in (*DAMAGES.items(), *KNOWING[log_format].items())
]


@pytest.mark.parametrize(("log_format", "name", "damage"), ALL_DAMAGES)
def test_every_damage_damages(log_format: LogFormat, name: str, damage: Damage) -> None:
    whole = bases(log_format)[0]
    changed = [damage(whole, np.random.default_rng(seed)) for seed in range(4)]
    assert any(each != whole for each in changed), name
    assert len(set(changed)) > 1 or name in ("twice", "table all_quoted")


@pytest.mark.parametrize("log_format", list(LogFormat))
def test_what_is_damaged_was_sound(client: FlaskClient, log_format: LogFormat) -> None:
    """Else the campaign would only ever see the first check of a reader."""
    verdicts = []
    for content in bases(log_format)[:4]:
        answer = client.post("/v1/reductions", data=content, content_type="application/octet-stream")
        verdicts.append(judge(answer)["calibration"]["verdict"])
    assert len(verdicts) - verdicts.count("refused") >= 2


@pytest.mark.parametrize(("seed", "number"), [(1, 518), (2, 3602), (3, 4370), (3, 4113)])
def test_what_once_failed(client: FlaskClient, seed: int, number: int) -> None:
    """A long answer, memory for a grid over the span, a filter wider than memory, a covariance beyond digits."""
    judge(send(client, make_case(seed, number)))


def test_many_loiters_are_thinned() -> None:
    """A thousand windows made a fit of thousands of unknowns, and no end."""
    log = flights()[0]
    assert log.gps is not None
    edges = np.linspace(log.gps.time_s[0], log.gps.time_s[-1], 61).tolist()
    windows = tuple(Window(start, end) for start, end in pairwise(edges))
    reduction = reduce_flight(log, Settings(loiters=windows))
    used = [index for index, loiter in enumerate(reduction.loiters) if loiter.used]
    assert len(reduction.loiters) > MOST_LOITERS
    assert 0 < len(used) <= MOST_LOITERS
    assert [wind.loiter for wind in reduction.wind_by_loiter] == used
