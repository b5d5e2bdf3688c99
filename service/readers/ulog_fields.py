"""The one table of topics and fields that ULog files carry, as met in logs of several generations.

These names are the log's own and stand nowhere else. Each entry says how a field becomes one of our quantities in SI:
`value = raw * scale + offset`. Of several fields for one quantity the first that is there is taken.
"""

from collections.abc import Mapping
from dataclasses import dataclass

from service.airdata.constants import ZERO_CELSIUS_K


@dataclass(frozen=True, slots=True)
class LogField:
    name: str
    kind: str
    """Type in the container, as met; a file that declares another is read by what it declares."""
    scale: float = 1.0
    offset: float = 0.0


@dataclass(frozen=True, slots=True)
class Topic:
    """A kind of message: which fields hold which quantity, and what it is in plain words for the answer."""

    name: str
    words: str
    fields: Mapping[str, tuple[LogField, ...]]


TIME = LogField("timestamp", "uint64_t", 1e-6)
"""When a message was written. [s] since the recorder started"""

SAMPLE_TIME = LogField("timestamp_sample", "uint64_t", 1e-6)
"""When its data were sampled; missing in older logs. [s]"""


def _kelvin(name: str) -> LogField:
    return LogField(name, "float", 1.0, ZERO_CELSIUS_K)


PROBE_TOPICS = (
    Topic(
        "differential_pressure",
        "differential pressure sensor",
        {
            "impact_pressure_pa": (
                LogField("differential_pressure_pa", "float"),
                LogField("differential_pressure_raw_pa", "float"),
                LogField("differential_pressure_filtered_pa", "float"),
            ),
            "sensor_temperature_k": (_kelvin("temperature"),),
        },
    ),
)

STATIC_TOPICS = (
    Topic(
        "vehicle_air_data",
        "air data of the recorder",
        {
            "static_pressure_pa": (LogField("baro_pressure_pa", "float"),),
            "board_temperature_k": (_kelvin("baro_temp_celcius"), _kelvin("ambient_temperature")),
        },
    ),
    Topic(
        "sensor_baro",
        "barometer",
        {
            "static_pressure_pa": (LogField("pressure", "float"),),
            "board_temperature_k": (_kelvin("temperature"),),
        },
    ),
)
"""Older barometers write hectopascals under the same name: told by the size of the numbers."""

AIR_TEMPERATURE_TOPICS = (
    Topic(
        "airspeed",
        "air temperature beside the airspeed",
        {"air_temperature_k": (_kelvin("air_temperature_celsius"),)},
    ),
)

_GPS_FIELDS: Mapping[str, tuple[LogField, ...]] = {
    "velocity_north_mps": (LogField("vel_n_m_s", "float"),),
    "velocity_east_mps": (LogField("vel_e_m_s", "float"),),
    "velocity_down_mps": (LogField("vel_d_m_s", "float"),),
    "latitude_deg": (LogField("latitude_deg", "double"), LogField("lat", "int32_t", 1e-7)),
    "longitude_deg": (LogField("longitude_deg", "double"), LogField("lon", "int32_t", 1e-7)),
    "altitude_m": (LogField("altitude_msl_m", "double"), LogField("alt", "int32_t", 1e-3)),
    "speed_uncertainty_mps": (LogField("s_variance_m_s", "float"),),
    "horizontal_uncertainty_m": (LogField("eph", "float"),),
    "fix": (LogField("fix_type", "uint8_t"),),
    "velocity_valid": (LogField("vel_ned_valid", "bool"),),
    "utc_s": (LogField("time_utc_usec", "uint64_t", 1e-6),),
}

GPS_TOPICS = (
    Topic("vehicle_gps_position", "GPS solution of the recorder", _GPS_FIELDS),
    Topic("sensor_gps", "GPS receiver", _GPS_FIELDS),
)

ATTITUDE_TOPICS = (
    Topic(
        "vehicle_attitude",
        "attitude",
        {f"quaternion_{i}": (LogField(f"q[{i}]", "float"),) for i in range(4)},
    ),
)

ACCELERATION_TOPICS = (
    Topic(
        "vehicle_acceleration",
        "accelerometer",
        {f"specific_force_{axis}_mps2": (LogField(f"xyz[{i}]", "float"),) for i, axis in enumerate("xyz")},
    ),
    Topic(
        "sensor_combined",
        "inertial sensors",
        {
            f"specific_force_{axis}_mps2": (LogField(f"accelerometer_m_s2[{i}]", "float"),)
            for i, axis in enumerate("xyz")
        },
    ),
)

GROUND_TOPICS = (
    Topic(
        "vehicle_land_detected",
        "ground contact",
        {"on_ground": (LogField("landed", "bool"), LogField("ground_contact", "bool"))},
    ),
)

ALL_TOPICS: tuple[Topic, ...] = (
    *PROBE_TOPICS,
    *STATIC_TOPICS,
    *AIR_TEMPERATURE_TOPICS,
    *GPS_TOPICS,
    *ATTITUDE_TOPICS,
    *ACCELERATION_TOPICS,
    *GROUND_TOPICS,
)

TOPIC_NAMES: tuple[str, ...] = tuple(topic.name for topic in ALL_TOPICS)
"""What is loaded; all else in a log stays unread."""
