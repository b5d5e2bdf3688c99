"""Joint scale and wind sets S1 and S2 of the check values (section d3, constructed), posted without noise.

Leg by leg through the whole service: pressure factor 1.18, wind -2.5 m/s north and 4.0 m/s east. The linear
incompressible fit would find 1.17792. S2 holds one airspeed exactly, so its reading never changes: GPS says the same,
and that is no frozen sensor.
"""

import json
from pathlib import Path

import numpy as np
import pytest

from service.app import create_app
from service.config import Config

S1 = (
    (15.500000, 4.000000, 160.365565),
    (13.056349, 19.556349, 239.642130),
    (-2.500000, 22.000000, 160.365565),
    (-18.056349, 19.556349, 239.642130),
    (-20.500000, 4.000000, 160.365565),
    (-18.056349, -11.556349, 239.642130),
    (-2.500000, -14.000000, 160.365565),
    (13.056349, -11.556349, 239.642130),
)
S2 = (
    (17.500000, 4.000000, 198.015032),
    (11.642136, 18.142136, 198.015032),
    (-2.500000, 24.000000, 198.015032),
    (-16.642136, 18.142136, 198.015032),
    (-22.500000, 4.000000, 198.015032),
    (-16.642136, -10.142136, 198.015032),
    (-2.500000, -16.000000, 198.015032),
    (11.642136, -10.142136, 198.015032),
)


def batch(legs: tuple[tuple[float, float, float], ...], leg_s: float, turns: int) -> bytes:
    """Each leg for `leg_s`, all of them `turns` times, GPS 5 Hz, probe 10 Hz, standard atmosphere at 500 m."""
    flown = np.array(legs * turns)
    end_s = leg_s * len(flown)
    gps_s, probe_s = np.arange(0, end_s, 0.2), np.arange(0, end_s, 0.1)
    gps, probe = (flown[np.minimum((t / leg_s + 1e-9).astype(int), len(flown) - 1)] for t in (gps_s, probe_s))
    document = {
        "probe": {"time_s": probe_s.tolist(), "impact_pressure_pa": probe[:, 2].tolist()},
        "static": {"time_s": [0, end_s], "static_pressure_pa": [95460.835337] * 2},
        "temperature": {"time_s": [0, end_s], "air_temperature_k": [284.9] * 2},
        "gps": {
            "time_s": gps_s.tolist(),
            "velocity_north_mps": gps[:, 0].tolist(),
            "velocity_east_mps": gps[:, 1].tolist(),
            "velocity_down_mps": [0.0] * gps_s.size,
        },
        "settings": {"probe": {"zero_offset_pa": 0.0, "zero_offset_uncertainty_pa": 0.01}},
    }
    return json.dumps(document).encode()


@pytest.mark.parametrize("legs", [S1, S2], ids=["S1", "S2"])
@pytest.mark.parametrize(("leg_s", "turns"), [(1.0, 20), (5.0, 4), (30.0, 1), (60.0, 1)])
def test_the_factor_and_the_wind_are_found(
    tmp_path: Path, legs: tuple[tuple[float, float, float], ...], leg_s: float, turns: int
) -> None:
    client = create_app(Config(data=tmp_path, log_level="ERROR")).test_client()
    answer = client.post("/v1/reductions", data=batch(legs, leg_s, turns), content_type="application/json")
    assert answer.status_code == 200
    document = answer.get_json()
    assert document["calibration"]["verdict"] == "accepted"
    assert document["faults"] == []
    assert document["calibration"]["pressure_scale"]["value"] == pytest.approx(1.18, rel=2e-5)
    assert document["wind"]["north_mps"]["value"] == pytest.approx(-2.5, abs=1e-3)
    assert document["wind"]["east_mps"]["value"] == pytest.approx(4.0, abs=1e-3)
