"""The text for people says what the JSON says, and never a NaN or an empty row."""

from dataclasses import replace

import pytest

from service.domain.codes import CAUTIONS
from service.domain.results import Estimate
from service.summary import summary_text
from tests import made


def scaled(value: float, half_width: float) -> str:
    estimate = Estimate(value, half_width / 2, (value - half_width, value + half_width))
    return summary_text(replace(made.reduction(), calibration=replace(made.calibration(), speed_scale=estimate)))


@pytest.mark.parametrize(
    ("value", "half_width", "words"),
    [
        (0.94, 0.01, "about 6.4 % high, which hides a stall"),
        (1.06, 0.01, "about 5.7 % low"),
        (1.06, 0.10, "as far as these data can tell"),
    ],
)
def test_which_way_the_probe_is_wrong(value: float, half_width: float, words: str) -> None:
    assert words in scaled(value, half_width)


def test_everything_is_told() -> None:
    text = summary_text(made.reduction())
    for words in (
        "Verdict: DOUBTFUL",
        "The interval is wide. [interval_wide]",
        "0.9400 ± 0.0100 (95 %: 0.9200 to 0.9600), the factor to load",
        "0.80 ± 0.10 Pa (95 %: 0.60 to 1.00), ground",
        "15.0 to 19.8 m/s",
        "5.00 ± 0.10 m/s",
        "5.7 turns left",
        "Too slow.",
        "FAULT spikes (probe, 1.0 to 2.0 s): Three spikes.",
        *CAUTIONS.values(),
    ):
        assert words in text, words


def test_what_could_not_be_made_has_no_row() -> None:
    text = summary_text(made.refused_reduction())
    assert "Verdict: REFUSED" in text
    assert "There is no probe. [no_probe]" in text
    assert "No stall speed is given." in text
    for absent in ("speed scale", "None", " nan"):
        assert absent not in text


def test_no_warning_is_no_proof() -> None:
    assert "none (no proof of safety)" in summary_text(replace(made.reduction(), stall_warnings=()))
