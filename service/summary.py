"""A reduction as text for people at a terminal."""

from collections.abc import Iterable, Iterator

from service.domain.codes import CAUTIONS
from service.domain.results import Calibration, Estimate, Reduction, WindEstimate

WIDTH = 24


def summary_text(reduction: Reduction) -> str:
    """Verdict, numbers, loiters, warnings, faults and cautions, line by line."""
    sections = (
        _calibration(reduction.calibration),
        _wind(reduction),
        _loiters(reduction),
        _stall(reduction),
        _faults(reduction),
        _inputs(reduction),
        _cautions(),
    )
    return "\n".join(line for section in sections for line in section)


def _calibration(calibration: Calibration) -> Iterator[str]:
    yield f"Verdict: {calibration.verdict.value.upper()}"
    yield from (f"  {reason.message} [{reason.code.value}]" for reason in calibration.reasons)
    if calibration.speed_scale is not None:
        yield f"  {_reads(calibration.speed_scale)}"
    yield from _row("speed scale", calibration.speed_scale, 4)
    yield from _row("pressure scale", calibration.pressure_scale, 4)
    yield from _row("total speed scale", calibration.total_speed_scale, 4, note=", the factor to load")
    yield from _row("zero offset", calibration.zero_offset_pa, 2, "Pa", f", {calibration.zero_offset_source.value}")
    yield from _row("GPS delay", calibration.gps_delay_s, 2, "s")
    if calibration.airspeed_range_mps is not None:
        low, high = calibration.airspeed_range_mps
        yield _line("holds for CAS", f"{low:.1f} to {high:.1f} m/s")
    if calibration.gust_mps is not None:
        yield _line("gusts", f"{calibration.gust_mps:.2f} m/s per component")


def _reads(speed_scale: Estimate) -> str:
    """Which way the probe is wrong, where the interval is sure of it."""
    low, high = speed_scale.interval_95
    percent = abs(1.0 / speed_scale.value - 1.0) * 100.0
    if high < 1.0:
        return f"The probe reads about {percent:.1f} % high, which hides a stall."
    if low > 1.0:
        return f"The probe reads about {percent:.1f} % low."
    return "The probe reads right, as far as these data can tell."


def _wind(reduction: Reduction) -> Iterator[str]:
    if reduction.wind is not None:
        yield from _wind_rows("wind", reduction.wind)
    for entry in reduction.wind_by_loiter:
        yield from _row(f"  in loiter {entry.loiter}", entry.wind.speed_mps, 2, "m/s", _from(entry.wind))


def _wind_rows(name: str, wind: WindEstimate) -> Iterator[str]:
    yield from _row(name, wind.speed_mps, 2, "m/s", _from(wind))
    yield from _row("  towards north", wind.north_mps, 2, "m/s")
    yield from _row("  towards east", wind.east_mps, 2, "m/s")


def _from(wind: WindEstimate) -> str:
    return "" if wind.from_deg is None else f", from {wind.from_deg.value:.0f} deg"


def _loiters(reduction: Reduction) -> Iterator[str]:
    for index, loiter in enumerate(reduction.loiters):
        shape = "legs" if loiter.direction == "straight" else f"{loiter.turns:.1f} turns {loiter.direction.value}"
        unused = "" if loiter.used else ", not used"
        yield _line(
            f"loiter {index}",
            f"{loiter.start_s:.1f} to {loiter.end_s:.1f} s, {shape}, heading coverage "
            f"{loiter.heading_coverage_deg:.0f} deg, TAS {loiter.true_airspeed_mps:.1f} m/s{unused}",
        )


def _stall(reduction: Reduction) -> Iterator[str]:
    if reduction.stall_margins_absent is not None:
        yield reduction.stall_margins_absent
    elif not reduction.stall_warnings:
        yield _line("stall warnings", "none (no proof of safety)")
    for warning in reduction.stall_warnings:
        yield f"{warning.message} ({warning.start_s:.1f} to {warning.end_s:.1f} s)"


def _faults(reduction: Reduction) -> Iterator[str]:
    for fault in reduction.faults:
        yield f"FAULT {fault.fault.value} ({fault.sensor}, {fault.start_s:.1f} to {fault.end_s:.1f} s): {fault.message}"


def _inputs(reduction: Reduction) -> Iterator[str]:
    inputs = reduction.inputs
    cut = ", ended early" if inputs.truncated else ""
    yield _line("read", f"{inputs.format.value}, {inputs.duration_s:.1f} s{cut}")
    sources = (inputs.probe_source, inputs.static_source, inputs.temperature_source, inputs.load_factor_source)
    names = ("probe", "static pressure", "temperature", "load factor")
    yield from (_line(f"  {name}", source) for name, source in zip(names, sources, strict=True) if source)


def _cautions() -> Iterable[str]:
    yield "Cautions:"
    yield from (f"  - {sentence}" for sentence in CAUTIONS.values())


def _row(name: str, estimate: Estimate | None, decimals: int, unit: str = "", note: str = "") -> Iterator[str]:
    """One line, or none for what could not be made."""
    if estimate is None:
        return
    low, high = estimate.interval_95
    value = f"{estimate.value:.{decimals}f} ± {estimate.standard_uncertainty:.{decimals}f} {unit}".rstrip()
    yield _line(name, f"{value} (95 %: {low:.{decimals}f} to {high:.{decimals}f}){note}")


def _line(name: str, text: str) -> str:
    return f"{name:<{WIDTH}}{text}"
