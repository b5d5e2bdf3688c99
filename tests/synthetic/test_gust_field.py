"""The gust field is what it claims: solenoidal, of the right strength, correlated as the formulas say."""

from dataclasses import replace

import numpy as np
import pytest
from scipy.integrate import quad

from service.domain.arrays import FloatArray
from tests.synthetic.gust_field import (
    GustField,
    GustModel,
    Spectrum,
    lateral_correlation,
    longitudinal_correlation,
    low_altitude_dryden,
)

FIELDS = 60
SIGMA_MPS = 0.8
LENGTH_M = 200.0
SEPARATION_M = np.array([0.0, 10.0, 50.0, 100.0, 200.0, 400.0])


def _field(model: GustModel, count: int = FIELDS) -> GustField:
    return GustField([model] * count, [np.random.default_rng([4, i]) for i in range(count)])


def _products(field: GustField, places: int = 60) -> FloatArray:
    """Mean products of the gust at a point with that at separations to the north: (3 components, separations)."""
    rng = np.random.default_rng(9)
    line = np.zeros((3, SEPARATION_M.size))
    line[0] = SEPARATION_M
    total = np.zeros((3, SEPARATION_M.size))
    for flight in range(FIELDS):
        origins = rng.uniform(-5e4, 5e4, (3, places, 1))
        gust = field.along(flight, (line[:, None, :] + origins).reshape(3, -1)).reshape(3, places, -1)
        total += np.mean(gust[:, :, :1] * gust, axis=1)
    return total / FIELDS


@pytest.mark.parametrize("spectrum", list(Spectrum))
def test_the_correlation_follows_the_formulas(spectrum: Spectrum) -> None:
    measured = _products(_field(GustModel(spectrum, SIGMA_MPS, LENGTH_M))) / SIGMA_MPS**2
    along = longitudinal_correlation(spectrum, SEPARATION_M, LENGTH_M)
    across = lateral_correlation(spectrum, SEPARATION_M, LENGTH_M)
    np.testing.assert_allclose(measured[0], along, atol=0.06)
    np.testing.assert_allclose(measured[1], across, atol=0.06)
    np.testing.assert_allclose(measured[2], across, atol=0.06)


@pytest.mark.parametrize("spectrum", list(Spectrum))
def test_the_integral_length_and_the_lateral_form_belong_to_the_longitudinal_correlation(spectrum: Spectrum) -> None:
    def along(separation: float) -> float:
        return float(longitudinal_correlation(spectrum, np.array(separation), LENGTH_M))

    length, _ = quad(along, 0.0, 60.0 * LENGTH_M, limit=200)
    # the von Karman length is 1.339 L by the rounding of the military specification
    assert length == pytest.approx(LENGTH_M, rel=2e-4)
    for separation in (20.0, 150.0, 600.0):
        slope = (along(separation + 0.01) - along(separation - 0.01)) / 0.02
        expected = along(separation) + 0.5 * separation * slope
        across = lateral_correlation(spectrum, np.array(separation), LENGTH_M)
        assert float(across) == pytest.approx(expected, abs=1e-6)


def test_every_mode_is_at_right_angles_to_its_wave() -> None:
    field = _field(GustModel(Spectrum.VON_KARMAN, SIGMA_MPS, LENGTH_M), 3)
    along = np.einsum("fmi,fim->fm", field.wave, field.amplitude)
    size = np.linalg.norm(field.wave, axis=2) * np.linalg.norm(field.amplitude, axis=1)
    assert np.max(np.abs(along) / size) < 1e-6


def test_flights_have_fields_of_their_own_and_one_point_gives_what_the_line_gives() -> None:
    field = _field(GustModel(Spectrum.DRYDEN, SIGMA_MPS, LENGTH_M, turnover_s=300.0), 2)
    place = np.array([[120.0, 120.0], [-40.0, -40.0], [-100.0, -100.0]])
    together = field.velocity(place, 35.0)
    assert np.min(np.abs(together[:, 0] - together[:, 1])) > 1e-3
    for flight in range(2):
        alone = field.along(flight, place[:, flight : flight + 1], 35.0)[:, 0]
        np.testing.assert_allclose(together[:, flight], alone, atol=1e-5)


def test_a_decaying_field_forgets_itself_in_its_turnover_time() -> None:
    frozen = GustModel(Spectrum.VON_KARMAN, SIGMA_MPS, LENGTH_M)
    for model, kept in ((replace(frozen, turnover_s=250.0), np.exp(-1.0)), (frozen, 1.0)):
        field = _field(model)
        places = np.random.default_rng(2).uniform(-5e4, 5e4, (3, 100))
        products = [
            np.mean(field.along(i, places) * field.along(i, places, 250.0)) / np.mean(field.along(i, places) ** 2)
            for i in range(FIELDS)
        ]
        assert np.mean(products) == pytest.approx(kept, abs=0.05)


def test_the_anisotropic_model_has_the_tabulated_ratios() -> None:
    """Row of 400 ft in the table of check values, section g (MIL-F-8785C)."""
    model = low_altitude_dryden(1.013, 121.92)
    assert model.length_m == pytest.approx(275.99, abs=0.01)
    assert model.vertical_length_m == pytest.approx(121.92)
    assert model.vertical_sigma_mps == pytest.approx(0.772, abs=1e-3)
    products = _products(_field(model))
    np.testing.assert_allclose(np.sqrt(products[:, 0]), [1.013, 1.013, 0.772], rtol=0.05)
    vertical = lateral_correlation(Spectrum.DRYDEN, SEPARATION_M, 121.92)
    np.testing.assert_allclose(products[2] / 0.772**2, vertical, atol=0.07)
