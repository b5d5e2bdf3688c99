"""Agreement with general libraries of the atmosphere and of compressible flow, at thirteen points.

Tolerances: 2e-6 relative, 3e-6 for the library whose gas constant is newer (8.314462618 J/(mol K)). Two of the three
take geometric altitude.
"""

import importlib
import warnings
from collections.abc import Callable
from types import ModuleType

import fluids.atmosphere
import fluids.compressible
import pystdatm
import pytest

from service.airdata.atmosphere import (
    geometric_from_geopotential_altitude,
    standard_density_from_altitude,
    standard_pressure_from_altitude,
    standard_speed_of_sound_from_altitude,
    standard_temperature_from_altitude,
)
from service.airdata.constants import SEA_LEVEL_PRESSURE_PA, SEA_LEVEL_SPEED_OF_SOUND_MPS, SEA_LEVEL_TEMPERATURE_K
from service.airdata.pitot import (
    calibrated_airspeed_from_impact_pressure,
    calibrated_from_equivalent_airspeed,
    calibrated_from_true_airspeed,
    equivalent_airspeed_from_impact_pressure,
    impact_pressure_from_calibrated_airspeed,
    impact_pressure_from_mach,
    mach_from_calibrated_airspeed,
    true_from_calibrated_airspeed,
)
from tests.reference.airspeed_points import AIRSPEED_POINTS, AirspeedPoint

Quantities = dict[str, float]


def test_flightcondition_agrees_on_the_whole_chain(point: AirspeedPoint, flight: ModuleType) -> None:
    unit = flight.unit
    altitude = float(geometric_from_geopotential_altitude(point.geopotential_altitude_m)) * unit("m")

    def state(**airspeed: float) -> Callable[[str, str], float]:
        given = {name: speed * unit("m/s") for name, speed in airspeed.items()}
        condition = flight.FlightCondition(h=altitude, units="SI", **given)
        return lambda name, in_unit: float(getattr(condition, name).to(in_unit).magnitude.item())

    from_calibrated = state(CAS=point.calibrated_airspeed_mps)
    theirs = {
        "temperature": from_calibrated("T", "K"),
        "pressure": from_calibrated("p", "Pa"),
        "density": from_calibrated("rho", "kg/m^3"),
        "speed of sound": from_calibrated("a", "m/s"),
        "impact pressure": from_calibrated("q_c", "Pa"),
        "mach": from_calibrated("M", "dimensionless"),
        "true": from_calibrated("TAS", "m/s"),
        "equivalent": from_calibrated("EAS", "m/s"),
        "calibrated from true": state(TAS=point.true_airspeed_mps)("CAS", "m/s"),
        "calibrated from equivalent": state(EAS=point.equivalent_airspeed_mps)("CAS", "m/s"),
    }
    assert theirs == pytest.approx(atmosphere_of(point) | airspeeds_of(point), rel=2e-6)


def test_pystdatm_agrees_on_the_atmosphere(point: AirspeedPoint) -> None:
    altitude = float(point.geopotential_altitude_m)
    theirs = {
        "temperature": float(pystdatm.temperature(altitude)),
        "pressure": float(pystdatm.pressure(altitude)),
        "density": float(pystdatm.density(altitude)),
        "speed of sound": float(pystdatm.speed_of_sound(altitude)),
    }
    assert theirs == pytest.approx(atmosphere_of(point), rel=2e-6)


def test_fluids_agrees_on_the_atmosphere(point: AirspeedPoint) -> None:
    altitude = float(geometric_from_geopotential_altitude(point.geopotential_altitude_m))
    library = fluids.atmosphere.ATMOSPHERE_1976(altitude)
    theirs = {
        "temperature": library.T,
        "pressure": library.P,
        "density": library.rho,
        "speed of sound": library.v_sonic,
    }
    assert theirs == pytest.approx(atmosphere_of(point), rel=3e-6)


def test_fluids_agrees_on_isentropic_stagnation(point: AirspeedPoint) -> None:
    mach = point.mach
    temperature = float(standard_temperature_from_altitude(point.geopotential_altitude_m))
    total = fluids.compressible.P_stagnation(
        P=point.static_pressure_pa, T=temperature, Tst=temperature * (1.0 + 0.2 * mach**2), k=1.4
    )
    ours = impact_pressure_from_mach(mach, point.static_pressure_pa)
    assert float(ours) == pytest.approx(total - point.static_pressure_pa, rel=3e-6)
    sea_level_mach = point.calibrated_airspeed_mps / SEA_LEVEL_SPEED_OF_SOUND_MPS
    sea_level_total = fluids.compressible.P_stagnation(
        P=SEA_LEVEL_PRESSURE_PA,
        T=SEA_LEVEL_TEMPERATURE_K,
        Tst=SEA_LEVEL_TEMPERATURE_K * (1.0 + 0.2 * sea_level_mach**2),
        k=1.4,
    )
    calibrated = calibrated_airspeed_from_impact_pressure(sea_level_total - SEA_LEVEL_PRESSURE_PA)
    assert float(calibrated) == pytest.approx(point.calibrated_airspeed_mps, rel=3e-6)


def atmosphere_of(point: AirspeedPoint) -> Quantities:
    altitude = point.geopotential_altitude_m
    return {
        "temperature": float(standard_temperature_from_altitude(altitude)),
        "pressure": float(standard_pressure_from_altitude(altitude)),
        "density": float(standard_density_from_altitude(altitude)),
        "speed of sound": float(standard_speed_of_sound_from_altitude(altitude)),
    }


def airspeeds_of(point: AirspeedPoint) -> Quantities:
    altitude, calibrated = point.geopotential_altitude_m, point.calibrated_airspeed_mps
    pressure, temperature = standard_pressure_from_altitude(altitude), standard_temperature_from_altitude(altitude)
    impact = impact_pressure_from_calibrated_airspeed(calibrated)
    return {
        "impact pressure": float(impact),
        "mach": float(mach_from_calibrated_airspeed(calibrated, pressure)),
        "true": float(true_from_calibrated_airspeed(calibrated, pressure, temperature)),
        "equivalent": float(equivalent_airspeed_from_impact_pressure(impact, pressure)),
        "calibrated from true": float(calibrated_from_true_airspeed(point.true_airspeed_mps, pressure, temperature)),
        "calibrated from equivalent": float(
            calibrated_from_equivalent_airspeed(point.equivalent_airspeed_mps, pressure)
        ),
    }


@pytest.fixture(params=AIRSPEED_POINTS, ids=str)
def point(request: pytest.FixtureRequest) -> AirspeedPoint:
    chosen: AirspeedPoint = request.param
    return chosen


@pytest.fixture(scope="module")
def flight() -> ModuleType:
    with warnings.catch_warnings():
        # it sets an option of its units library by the older name while it is imported
        warnings.filterwarnings(
            "ignore", "This function will be removed in future versions of pint", DeprecationWarning
        )
        return importlib.import_module("flightcondition")
