"""The list of checks, and how their findings become one report."""

from collections.abc import Callable

import numpy as np

from service.domain.codes import FaultKind
from service.domain.log import ReadingGap, SensorNote, StaticSamples
from service.domain.results import AirDataSeries, FaultReport
from service.reduction.faults.blocked import find_blocked
from service.reduction.faults.dead import find_dead_sensors
from service.reduction.faults.dropout import find_dropouts
from service.reduction.faults.evidence import FlightEvidence, gather_evidence
from service.reduction.faults.finding import Finding
from service.reduction.faults.frozen import find_frozen
from service.reduction.faults.frozen_static import find_frozen_static
from service.reduction.faults.no_airflow import find_no_airflow
from service.reduction.faults.saturated import find_saturated
from service.reduction.faults.spikes import find_spikes
from service.reduction.faults.swapped import find_swapped

Check = Callable[[FlightEvidence], list[Finding]]

CHECKS: tuple[tuple[tuple[FaultKind, ...], Check], ...] = (
    ((FaultKind.DEAD,), find_dead_sensors),
    ((FaultKind.DROPOUT,), find_dropouts),
    ((FaultKind.SATURATED,), find_saturated),
    ((FaultKind.FROZEN,), find_frozen),
    ((FaultKind.SPIKES,), find_spikes),
    ((FaultKind.FROZEN_STATIC,), find_frozen_static),
    ((FaultKind.TRAPPED, FaultKind.BLOCKED), find_no_airflow),
    ((FaultKind.BLOCKED,), find_blocked),
    ((FaultKind.SWAPPED,), find_swapped),
)
"""What each check may find, in the order in which they look. A later one does not see samples that an earlier one has
claimed: single samples go first (a frozen run must not pass for a closed probe), whole stretches after them (a closed
probe that passes its zero in a climb must not pass for an open one)."""


def find_faults(
    series: AirDataSeries,
    *,
    log_gaps: tuple[ReadingGap, ...] = (),
    sensors: tuple[SensorNote, ...] = (),
    full_scale_pa: float | None = None,
    given_zero_pa: float | None = None,
    static: StaticSamples | None = None,
) -> FaultReport:
    """All faults that show before the fit.

    Parameters
    ----------
    log_gaps : spans for which the recorder says that it lost data.
    sensors : every instance of a sensor that the log holds, as judged by the reader.
    full_scale_pa : the probe's, where known. [Pa]
    given_zero_pa : the zero offset that the user gave. [Pa]
    static : the static sensor's own samples; without them its freezing cannot be seen.

    Returns
    -------
    Faults in order of time, and masks (n,) of the samples of `series` that they spoil.
    """
    probe_faulty = ~np.isfinite(series.reading_pa)
    static_faulty = np.zeros(series.time_s.size, dtype=bool)
    if series.time_s.size < 2:
        return FaultReport((), probe_faulty, static_faulty)
    evidence = gather_evidence(series, static, log_gaps, sensors, full_scale_pa, given_zero_pa)
    findings: list[Finding] = []
    for _, check in CHECKS:
        for finding in check(evidence):
            findings.append(finding)
            probe_faulty = probe_faulty | finding.probe_samples
            static_faulty = static_faulty | finding.static_samples
        evidence = evidence.without(probe_faulty)
    faults = tuple(sorted((f.fault for f in findings), key=lambda fault: (fault.start_s, fault.fault)))
    return FaultReport(faults, probe_faulty, static_faulty)
