"""The one glossary: every column, setting and result by name, with its unit and meaning.

Names carry their unit as a suffix. The readers take their column names from :data:`STREAMS`, the schemas and the
documentation their units and sentences from :data:`GLOSSARY`.
"""

from collections.abc import Mapping
from dataclasses import dataclass
from types import MappingProxyType


@dataclass(frozen=True, slots=True)
class Term:
    """Unit ("1" for a ratio or a count) and meaning of a name."""

    unit: str
    meaning: str


STREAMS: Mapping[str, tuple[str, ...]] = MappingProxyType(
    {
        "probe": ("impact_pressure_pa",),
        "static": ("static_pressure_pa",),
        "temperature": ("air_temperature_k", "relative_humidity"),
        "gps": (
            "velocity_north_mps",
            "velocity_east_mps",
            "velocity_down_mps",
            "ground_speed_mps",
            "track_deg",
            "latitude_deg",
            "longitude_deg",
            "altitude_m",
            "speed_uncertainty_mps",
            "fix",
        ),
        "attitude": ("roll_deg", "pitch_deg", "yaw_deg"),
        "load_factor": ("load_factor",),
    }
)
"""Stream -> its columns, beside `time_s`, which each has."""

_COLUMNS = {
    "time_s": Term("s", "Time on the one axis of the log."),
    "impact_pressure_pa": Term("Pa", "Total minus static pressure as the probe reads it, uncorrected."),
    "static_pressure_pa": Term("Pa", "Static pressure, absolute."),
    "air_temperature_k": Term("K", "Temperature of the outside air."),
    "relative_humidity": Term("1", "Relative humidity, a fraction from 0 to 1."),
    "velocity_north_mps": Term("m/s", "GPS velocity over ground, northward."),
    "velocity_east_mps": Term("m/s", "GPS velocity over ground, eastward."),
    "velocity_down_mps": Term("m/s", "GPS velocity, downward."),
    "ground_speed_mps": Term("m/s", "Horizontal GPS speed over ground."),
    "track_deg": Term("deg", "Direction of the GPS velocity, clockwise from true north."),
    "latitude_deg": Term("deg", "Latitude, north positive."),
    "longitude_deg": Term("deg", "Longitude, east positive."),
    "altitude_m": Term("m", "Altitude above mean sea level."),
    "speed_uncertainty_mps": Term("m/s", "Standard uncertainty of the GPS velocity as the receiver states it."),
    "fix": Term("1", "Kind of GPS fix: below 3 there is no valid velocity."),
    "roll_deg": Term("deg", "Roll angle, right wing down positive."),
    "pitch_deg": Term("deg", "Pitch angle, nose up positive."),
    "yaw_deg": Term("deg", "Heading of the nose, clockwise from true north."),
    "load_factor": Term("1", "Load factor normal to the wing, 1 in level flight."),
}

_SETTINGS = {
    "reference_mass_kg": Term("kg", "Mass for which the stall speed holds."),
    "mass_kg": Term("kg", "Mass of the flight."),
    "mass_uncertainty_kg": Term("kg", "Standard uncertainty of the mass."),
    "maximum_bank_deg": Term("deg", "Largest bank that the aircraft flies."),
    "stall_speed_uncertainty_mps": Term("m/s", "Standard uncertainty of the stall speed."),
    "wing_area_m2": Term("m2", "Wing area."),
    "lift_coefficient_max": Term("1", "Largest lift coefficient of the configuration."),
    "zero_offset_uncertainty_pa": Term("Pa", "Standard uncertainty of the given zero offset."),
    "applied_speed_scale": Term("1", "Speed factor that the recorder had already applied."),
    "nominal_pressure_scale": Term("1", "Design value of the pressure scale of the probe."),
    "full_scale_pa": Term("Pa", "Reading at which the sensor saturates."),
    "caution_below": Term("1", "Stall margin below which a caution is given."),
    "warning_below": Term("1", "Stall margin below which a warning is given."),
    "hold_s": Term("s", "Time that a level is held after its margin has recovered."),
}

_RESULTS = {
    "speed_scale": Term("1", "Factor on the airspeed that the readings give: the root of the pressure scale."),
    "pressure_scale": Term("1", "K in: impact pressure = K (reading - zero offset)."),
    "total_speed_scale": Term("1", "Speed scale times the factor already applied: the one to load."),
    "accepted_half_width": Term("1", "Half width of the interval of the speed scale below which a flight is accepted."),
    "zero_offset_pa": Term("Pa", "What the probe reads in still air."),
    "gps_delay_s": Term("s", "A GPS velocity stamped t belongs to t - delay on the clock of the probe."),
    "airspeed_range_mps": Term("m/s", "Slowest and fastest calibrated airspeed that served the fit."),
    "gust_mps": Term("m/s", "Gust, root mean square per component."),
    "residual_rms_mps": Term("m/s", "Root mean square of airspeed by probe minus airspeed by wind triangle."),
    "north_mps": Term("m/s", "Velocity of the air mass, northward."),
    "east_mps": Term("m/s", "Velocity of the air mass, eastward."),
    "speed_mps": Term("m/s", "Magnitude of the mean wind."),
    "from_deg": Term("deg", "Direction that the wind blows from, clockwise from true north."),
    "start_s": Term("s", "Start of a span."),
    "end_s": Term("s", "End of a span."),
    "duration_s": Term("s", "Time from the first sample to the last."),
    "turns": Term("1", "Whole turns of the velocity vector."),
    "heading_coverage_deg": Term("deg", "360 minus the largest gap in air heading."),
    "true_airspeed_mps": Term("m/s", "Mean true airspeed of a loiter."),
    "indicated_mps": Term("m/s", "Airspeed from the uncorrected reading less its zero offset."),
    "calibrated_mps": Term("m/s", "Calibrated airspeed."),
    "equivalent_mps": Term("m/s", "Equivalent airspeed."),
    "true_mps": Term("m/s", "True airspeed."),
    "calibrated_standard_uncertainty_mps": Term("m/s", "Standard uncertainty of the calibrated airspeed."),
    "true_standard_uncertainty_mps": Term("m/s", "Standard uncertainty of the true airspeed."),
    "stall_speed_mps": Term(
        "m/s", "Stall speed as calibrated airspeed, at the load factor and mass that it belongs to."
    ),
    "margin": Term("1", "Calibrated airspeed / stall speed - 1."),
    "margin_lower_95": Term("1", "Lower 2.5 % point of the margin."),
    "indicated_margin": Term("1", "The margin that the uncorrected reading showed."),
    "minimum_margin": Term("1", "Smallest margin within a warning."),
    "minimum_margin_lower_95": Term("1", "Smallest lower 2.5 % point within a warning."),
    "heading_deg": Term("deg", "Direction of the air velocity, clockwise from true north."),
}

GLOSSARY: Mapping[str, Term] = MappingProxyType(_COLUMNS | _SETTINGS | _RESULTS)
"""Name -> unit and meaning."""

STREAM_OF: Mapping[str, str] = MappingProxyType(
    {column: stream for stream, columns in STREAMS.items() for column in columns}
)
"""Column -> the stream that it belongs to."""
