"""Campaign of hostile bodies through the real application: nothing fails, hangs, or fills the memory.

    python -m tests.hostile --cases 5000 --seed 1      the whole
    python -m tests.hostile --seed 1 --only 1234       one case again

Damaged, truncated and spliced logs, tables and batches, raw, in gzip and in forms, each told by seed and number. Every
case runs under an alarm and in a bounded address space; the answer must be one of the contract's. Prints how often each
status came, by format, and the slowest and the largest case. Ends with 1 if a case failed.
"""

import argparse
import resource
import signal
import sys
import tempfile
import time
import traceback
import warnings
from collections import Counter
from dataclasses import dataclass, field
from pathlib import Path
from types import FrameType

from flask.testing import FlaskClient

from service.app import create_app
from service.config import Config
from tests.hostile.cases import Case, make_case
from tests.hostile.judge import judge, send

MIB = 1024 * 1024
LONGEST_S = 20.0
"""Bound on one case; bodies have 2 MB at most."""
ADDRESS_SPACE = 3 * 1024 * MIB
"""Bound on the process, libraries included."""
LARGEST_GROWTH = 400 * MIB
"""Bound on what one case may add to the resident memory."""
PLACE_OF_FAILURES = Path(tempfile.gettempdir()) / "hostile-failures"


class Hung(BaseException):
    """Raised by the alarm; no handler of errors catches it."""


@dataclass
class Tally:
    """What came of the cases."""

    statuses: Counter[tuple[str, int]] = field(default_factory=Counter)
    verdicts: Counter[tuple[str, str]] = field(default_factory=Counter)
    failures: list[str] = field(default_factory=list)
    slowest: tuple[float, str] = (0.0, "")
    largest: tuple[int, str] = (0, "")


def run_case(client: FlaskClient, case: Case, tally: Tally) -> None:
    """Send one case and note what came of it."""
    label = f"#{case.number} {case.name}"
    before = _reset_peak()
    started = time.perf_counter()
    signal.setitimer(signal.ITIMER_REAL, LONGEST_S)
    try:
        answer = send(client, case)
        signal.setitimer(signal.ITIMER_REAL, 0)
        document = judge(answer)
        log_format = case.name.partition(":")[0]
        tally.statuses[log_format, answer.status_code] += 1
        if answer.status_code == 200:
            tally.verdicts[log_format, document["calibration"]["verdict"]] += 1
    except (Hung, Exception) as error:
        signal.setitimer(signal.ITIMER_REAL, 0)
        _note_failure(case, tally, f"{label}: {type(error).__name__}: {str(error)[:300]}")
        traceback.print_exception(error, limit=-6)
    tally.slowest = max(tally.slowest, (time.perf_counter() - started, label))
    growth = _peak() - before
    tally.largest = max(tally.largest, (growth, label))
    if growth > LARGEST_GROWTH:
        _note_failure(case, tally, f"{label}: {growth / MIB:.0f} MiB")


def _note_failure(case: Case, tally: Tally, words: str) -> None:
    PLACE_OF_FAILURES.mkdir(exist_ok=True)
    (PLACE_OF_FAILURES / f"{case.seed}-{case.number}").write_bytes(case.body)
    tally.failures.append(words)
    print("FAILED", words, flush=True)


def _reset_peak() -> int:
    """Let the peak of the resident memory begin anew, where the system can; bytes resident now."""
    try:
        Path("/proc/self/clear_refs").write_text("5")
    except OSError:
        return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024
    return _status("VmRSS")


def _peak() -> int:
    try:
        return _status("VmHWM")
    except OSError:
        return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * 1024


def _status(name: str) -> int:
    lines = Path("/proc/self/status").read_text().splitlines()
    return next(int(line.split()[1]) * 1024 for line in lines if line.startswith(name + ":"))


def _hang(_signal: int, _frame: FrameType | None) -> None:
    raise Hung(f"longer than {LONGEST_S:g} s")


def report(tally: Tally, cases: int, spent_s: float) -> str:
    """The table: a row per format."""
    statuses = sorted({status for _, status in tally.statuses})
    verdicts = sorted({verdict for _, verdict in tally.verdicts})
    rows = [f"{'format':8s}" + "".join(f"{status:>7d}" for status in statuses) + "".join(f"{v:>10s}" for v in verdicts)]
    for log_format in sorted({name for name, _ in tally.statuses}):
        counts = "".join(f"{tally.statuses[log_format, status]:7d}" for status in statuses)
        rows.append(f"{log_format:8s}{counts}" + "".join(f"{tally.verdicts[log_format, v]:10d}" for v in verdicts))
    seconds, slowest = tally.slowest
    growth, largest = tally.largest
    rows.append(f"{cases} cases in {spent_s:.0f} s, {len(tally.failures)} failed")
    rows.append(f"slowest {seconds:.2f} s: {slowest}")
    rows.append(f"largest {growth / MIB:.0f} MiB more: {largest}")
    return "\n".join(rows)


def main(arguments: list[str] | None = None) -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("--cases", type=int, default=5000)
    parser.add_argument("--seed", type=int, default=1)
    parser.add_argument("--first", type=int, default=0)
    parser.add_argument("--only", type=int)
    options = parser.parse_args(arguments)
    warnings.simplefilter("error")
    signal.signal(signal.SIGALRM, _hang)
    numbers = [options.only] if options.only is not None else range(options.first, options.first + options.cases)
    tally, started = Tally(), time.perf_counter()
    with tempfile.TemporaryDirectory() as folder:
        client = create_app(Config(data=Path(folder), log_level="ERROR")).test_client()
        make_case(options.seed, 0), make_case(options.seed, 1), make_case(options.seed, 2)
        resource.setrlimit(resource.RLIMIT_AS, (ADDRESS_SPACE, ADDRESS_SPACE))
        for number in numbers:
            run_case(client, make_case(options.seed, number), tally)
    print(report(tally, len(numbers), time.perf_counter() - started))
    return 1 if tally.failures else 0


if __name__ == "__main__":
    sys.exit(main())
