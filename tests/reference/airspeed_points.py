"""Thirteen points from -500 m to 20 km, evaluated at 40 digits in closed form.

Source: the closed forms of ISO 2533 / ICAO Doc 7488 (standard atmosphere) and of NACA Report 1135 (isentropic flow),
evaluated with arbitrary-precision arithmetic, independently of this project's code; 10 or 11 digits kept.
"""

from dataclasses import dataclass


@dataclass(frozen=True, slots=True)
class AirspeedPoint:
    geopotential_altitude_m: float
    calibrated_airspeed_mps: float
    density_kgpm3: float
    static_pressure_pa: float
    speed_of_sound_mps: float
    impact_pressure_pa: float
    mach: float
    true_airspeed_mps: float
    equivalent_airspeed_mps: float

    def __str__(self) -> str:
        return f"{self.geopotential_altitude_m:.0f}m"


# fmt: off
AIRSPEED_POINTS = tuple(AirspeedPoint(*row) for row in (
    # altitude, CAS, density, static pressure, speed of sound, impact pressure, Mach, TAS, EAS
    (-500, 12, 1.284890624, 107477.51116, 342.2076692, 88.227424405, 0.03423973055, 11.71709838, 12.00010674),
    (0, 15, 1.225000018, 101325.0, 340.293988, 137.87945765, 0.04407953278, 15.0, 15.0),
    (120, 18, 1.210949663, 99891.701804, 339.833101, 198.58885396, 0.0532733063, 18.10403288, 17.99990975),
    (500, 20, 1.167268828, 95460.835337, 338.369484, 245.21164839, 0.0605494083, 20.48807204, 19.9994701),
    (1000, 25, 1.1116425, 89874.562916, 336.4339715, 383.32931691, 0.07799888253, 26.24147382, 24.99785512),
    (1500, 30, 1.058067258, 84555.994074, 334.4872593, 552.3219224, 0.09648718596, 32.27373439, 29.99423643),
    (2000, 40, 1.006490097, 79495.201934, 332.5291507, 983.38984025, 0.1326443179, 44.10810236, 39.98113136),
    (3000, 50, 0.9091218612, 70108.526496, 328.5779283, 1539.5323933, 0.1764296148, 57.97087731, 49.94049882),
    (5000, 75, 0.7361155474, 54019.888188, 320.5293944, 3487.3551581, 0.3002881039, 96.25116409, 74.61238772),
    (8000, 100, 0.5251671282, 35599.785213, 308.0625738, 6258.376755, 0.4866097939, 149.9062655, 98.15230541),
    (11000, 120, 0.3639176481, 22632.040095, 295.0694935, 9097.6173061, 0.7118712131, 210.0514783, 114.4878114),
    (15000, 130, 0.193673452, 12044.552807, 295.0694935, 10734.450624, 0.9992294468, 294.8421268, 117.2347966),
    (20000, 60, 0.08803468479, 5474.8774243, 295.0694935, 2222.1906568, 0.7149428143, 210.9578141, 56.55284736),
))
# fmt: on
