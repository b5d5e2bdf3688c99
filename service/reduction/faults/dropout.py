"""Dropouts: samples that should be there by the probe's own rate, or that hold no number."""

import numpy as np

from service.domain.arrays import FloatArray
from service.domain.codes import FaultKind
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.finding import Finding, probe_finding, time_groups

MISSING_INTERVALS = 3.0
"""A gap of this many usual intervals has lost two samples or more; jitter of a slow logger stays below."""
SHORTEST_S = 0.5
"""Beyond the usual interval: shorter gaps lose nothing that the reduction needs."""
JOIN_S = 3.0
"""Gaps closer than this are told as one."""


def find_dropouts(evidence: FlightEvidence) -> list[Finding]:
    """Gaps of the probe's stream, by its times, by its missing numbers and by what the recorder itself says it lost."""
    time_s = evidence.series.time_s
    finite = np.isfinite(evidence.reading_pa)
    if finite.sum() < 2:
        return []
    gaps = np.vstack([_gaps_in_time(time_s[finite], evidence.interval_s), _gaps_told(evidence)])
    findings = []
    for start_s, end_s in time_groups(gaps, JOIN_S):
        inside = (time_s > start_s) & (time_s < end_s) & ~finite
        message = (
            f"No probe samples between {start_s:.1f} s and {end_s:.1f} s (usual interval {evidence.interval_s:.2f} s). "
            "Airspeed is unknown there; check the cable, the bus and the recorder's load."
        )
        findings.append(probe_finding(FaultKind.DROPOUT, time_s, inside, message, (start_s, end_s)))
    return findings


def _gaps_in_time(time_s: FloatArray, interval_s: float) -> FloatArray:
    """(k, 2) last time before and first time after each gap."""
    step = np.diff(time_s)
    long = step > max(MISSING_INTERVALS * interval_s, interval_s + SHORTEST_S)
    return np.column_stack([time_s[:-1][long], time_s[1:][long]])


def _gaps_told(evidence: FlightEvidence) -> FloatArray:
    """(k, 2) the recorder's own gaps that lie within the probe's time and hold none of its samples."""
    time_s = evidence.series.time_s
    spans = [(g.start_s, g.end_s) for g in evidence.log_gaps if g.end_s - g.start_s >= SHORTEST_S]
    kept = []
    for start_s, end_s in spans:
        low, high = np.searchsorted(time_s, [start_s, end_s])
        if low > 0 and high < time_s.size and high - low < 0.5 * (end_s - start_s) / evidence.interval_s:
            kept.append((start_s, end_s))
    return np.array(kept).reshape(-1, 2)
