"""Dead second sensors: the readers judge every instance of a sensor; here their judgement becomes a fault."""

import numpy as np

from service.domain.codes import FaultKind
from service.domain.results import Fault
from service.reduction.faults.evidence import FlightEvidence
from service.reduction.faults.finding import Finding


def find_dead_sensors(evidence: FlightEvidence) -> list[Finding]:
    """One fault per dead instance; the series was made from another, so no sample of it is spoiled."""
    nothing = np.zeros(evidence.series.time_s.size, dtype=bool)
    findings = []
    for note in evidence.sensors:
        if not note.dead or note.chosen:
            continue
        message = (
            f"The {note.sensor} sensor with instance number {note.instance} is dead: {note.reason}. "
            "Another one was used; mend or remove it."
        )
        fault = Fault(FaultKind.DEAD, note.sensor, note.start_s, note.end_s, message)
        findings.append(Finding(fault, nothing, nothing))
    return findings
