"""What the service costs beside the least that any program must do, measured in one run.

    python -m tests.benchmark                 all
    python -m tests.benchmark ulog            one of ulog, batch, flight
    python -m tests.benchmark --runs 9

- `ulog`: a whole reduction of a ULog of 100 MB against pyulog's own parse of the same topics; aim 1.3 in time and in
  memory.
- `batch`: a JSON batch of 1,000,000 x 6, its summary answer encoded, against typed decoding into arrays alone; aim 2.5.
- `flight`: reduction alone of 1 h and of 4 h at 10 Hz; aim 0.5 s for the hour and 4.4 for the ratio.

Every run is a child process of its own with one thread; times are the processor's for the work, after all imports, so
that a busy machine does not matter; medians count. Peak
memory is the process's, imports included; beside it stands what came on top of the imports. `--profile` shows where the
time of one run of each goes.
"""

import argparse
import cProfile
import json
import os
import pstats
import subprocess
import sys
import tempfile
import time
from collections.abc import Callable, Mapping
from dataclasses import replace
from pathlib import Path
from statistics import median
from typing import Any, NamedTuple

import numpy as np

from service.domain.log import DecodedLog

ULOG_BYTES = 100_000_000
BATCH_SAMPLES = 1_000_000
HOUR_S = 3600.0
STREAMS = ("probe", "static", "temperature", "gps", "attitude", "load_factor", "ground_contact")
ENVIRONMENT = dict.fromkeys(("OMP_NUM_THREADS", "OPENBLAS_NUM_THREADS", "MKL_NUM_THREADS"), "1")
FEWEST_RUNS = 5


class Cost(NamedTuple):
    """Of one run."""

    seconds: float
    peak_mib: float
    added_mib: float
    """Above what the imports took."""


# --- material ---------------------------------------------------------------------------------------------------------


def long_flight(duration_s: float) -> DecodedLog:
    """A simulated flight of two loiters, flown again and again until the time is over."""
    from tests.synthetic.families import simulate

    log = simulate("light", 1, seed=1)[0].log
    assert log.probe is not None
    period_s = float(np.ceil(log.probe.time_s[-1])) + 1.0
    times = int(np.ceil(duration_s / period_s))
    return replace(log, **{name: _repeated(getattr(log, name), times, period_s, duration_s) for name in STREAMS})


def _repeated(samples: Any, times: int, period_s: float, duration_s: float) -> Any:
    if samples is None:
        return None
    shifts = np.repeat(period_s * np.arange(times), samples.time_s.size)
    time_s = np.tile(samples.time_s, times) + shifts
    arrays = {name: v for name in samples.__slots__ if isinstance(v := getattr(samples, name), np.ndarray)}
    kept = {name: np.tile(values, times)[time_s <= duration_s] for name, values in arrays.items()}
    return replace(samples, **kept | {"time_s": time_s[time_s <= duration_s]})


def make_ulog(folder: Path) -> Path:
    """An hour's log, filled up to its size with messages that nobody needs."""
    from tests.synthetic.ulog_file import Variant, write_ulog

    path, log = folder / "hour.ulg", _at_full_rate(long_flight(HOUR_S))
    write_ulog(path, log)
    write_ulog(path, log, Variant(filler_bytes=ULOG_BYTES - path.stat().st_size))
    return path


def _at_full_rate(log: DecodedLog) -> DecodedLog:
    """Attitude and load factor as often as recorders write them, so that the needed topics have their usual weight."""
    return replace(log, attitude=_resampled(log.attitude, 100.0), load_factor=_resampled(log.load_factor, 200.0))


def _resampled(samples: Any, rate_hz: float) -> Any:
    arrays = {name: v for name in samples.__slots__ if isinstance(v := getattr(samples, name), np.ndarray)}
    time_s = np.arange(0.0, samples.time_s[-1], 1.0 / rate_hz)
    return replace(samples, **{name: np.interp(time_s, samples.time_s, v) for name, v in arrays.items()})


def make_batch(folder: Path) -> Path:
    """Four hours of probe and GPS, 1,000,000 samples and 6 columns in all between them."""
    log = long_flight(4 * HOUR_S)
    assert log.probe is not None
    assert log.gps is not None
    time_s = np.linspace(0.0, 4 * HOUR_S, BATCH_SAMPLES + 1)[:-1]
    random = np.random.default_rng(1)

    def column(source_s: Any, values: Any, decimals: int) -> list[float]:
        drawn = np.interp(time_s, source_s, values) + random.normal(0.0, 0.05, time_s.size)
        return [float(value) for value in np.round(drawn, decimals)]

    times = [float(value) for value in np.round(time_s, 4)]
    gps = {
        name: column(log.gps.time_s, getattr(log.gps, name), 3) for name in ("velocity_north_mps", "velocity_east_mps")
    }
    gps["altitude_m"] = column(log.gps.time_s, log.gps.altitude_m, 2)
    pressure = column(log.probe.time_s, log.probe.impact_pressure_pa, 2)
    batch = {"probe": {"time_s": times, "impact_pressure_pa": pressure}, "gps": {"time_s": times, **gps}}
    path = folder / "batch.json"
    path.write_text(json.dumps(batch, separators=(",", ":")))
    return path


# --- what is measured, each in a child --------------------------------------------------------------------------------

Work = Callable[[], object]


def reduce_and_encode(path: Path) -> Work:
    """Reading, reduction, summary answer."""
    from schemas.reduction import dump_reduction
    from schemas.wire import encode
    from service.intake import reduce_file

    return lambda: encode(dump_reduction(reduce_file(path, sha256="0" * 64), ()))


def parse_alone(path: Path) -> Work:
    """The library's own parse of the topics that the reader needs."""
    from pyulog import ULog

    from service.readers.ulog_fields import TOPIC_NAMES

    return lambda: ULog(str(path), message_name_filter_list=list(TOPIC_NAMES))


def decode_alone(path: Path) -> Work:
    """Typed decoding of the batch, and arrays of it."""
    import msgspec

    columns = dict[str, list[float]]
    decoder = msgspec.json.Decoder(dict[str, columns])

    def decode() -> object:
        batch = decoder.decode(path.read_bytes())
        return [np.array(values) for stream in batch.values() for values in stream.values()]

    return decode


def reduction_alone(path: Path) -> Work:
    """Reduction of a decoded flight; `path` is its length in hours."""
    from service.domain.settings import Settings
    from service.pipeline import reduce_flight

    log = long_flight(float(path.name) * HOUR_S)
    return lambda: reduce_flight(log, Settings())


WORKS: Mapping[str, Callable[[Path], Work]] = {
    work.__name__: work for work in (reduce_and_encode, parse_alone, decode_alone, reduction_alone)
}


def run_here(name: str, path: Path, profile: bool) -> Cost:
    """Do the work in this process."""
    work = WORKS[name](path)
    before = _new_peak_mib()
    profiler = cProfile.Profile()
    started = time.process_time()
    if profile:
        profiler.runcall(work)
        pstats.Stats(profiler, stream=sys.stderr).sort_stats("tottime").print_stats(25)
    else:
        work()
    seconds = time.process_time() - started
    return Cost(seconds, _peak_mib(), _peak_mib() - before)


def _new_peak_mib() -> float:
    """Let the peak begin anew; what is resident now. (`ru_maxrss` will not do: it outlives the start of a program.)"""
    Path("/proc/self/clear_refs").write_text("5")
    return _status_mib("VmRSS")


def _peak_mib() -> float:
    return _status_mib("VmHWM")


def _status_mib(name: str) -> float:
    lines = Path("/proc/self/status").read_text().splitlines()
    return next(int(line.split()[1]) for line in lines if line.startswith(name + ":")) / 1024


def run_child(name: str, path: Path, profile: bool) -> Cost:
    """Do the work in a process of its own."""
    command = [sys.executable, "-m", "tests.benchmark", "--child", name, str(path)]
    done = subprocess.run(
        [*command, *(["--profile"] if profile else [])],
        env=os.environ | ENVIRONMENT,
        stdout=subprocess.PIPE,
        check=True,
    )
    return Cost(*json.loads(done.stdout))


def measure(runs: int, profile: bool, *works: tuple[str, Path]) -> list[Cost]:
    """Medians of the works, run in turn so that a busy machine is busy for all."""
    rows = [[run_child(name, path, profile) for name, path in works] for _ in range(1 if profile else runs)]
    return [Cost(*(median(values) for values in zip(*costs, strict=True))) for costs in zip(*rows, strict=True)]


# --- the three comparisons --------------------------------------------------------------------------------------------


def compare(ours: Cost, least: Cost, aim: str) -> str:
    """Both, and their ratio."""
    return (
        f"  ours  {ours.seconds:6.2f} s  {ours.peak_mib:5.0f} MiB ({ours.added_mib:.0f} above imports)\n"
        f"  least {least.seconds:6.2f} s  {least.peak_mib:5.0f} MiB ({least.added_mib:.0f} above imports)\n"
        f"  ratio {ours.seconds / least.seconds:6.2f}    {ours.peak_mib / least.peak_mib:5.2f}"
        f"     ({ours.added_mib / max(least.added_mib, 1.0):.2f} above imports); aim {aim}"
    )


def compare_ulog(folder: Path, runs: int, profile: bool) -> str:
    path = make_ulog(folder)
    ours, least = measure(runs, profile, ("reduce_and_encode", path), ("parse_alone", path))
    return (
        f"ULog of {path.stat().st_size / 1e6:.0f} MB against the library's parse\n{compare(ours, least, '1.3 in both')}"
    )


def compare_batch(folder: Path, runs: int, profile: bool) -> str:
    path = make_batch(folder)
    ours, least = measure(runs, profile, ("reduce_and_encode", path), ("decode_alone", path))
    return f"batch of {path.stat().st_size / 1e6:.0f} MB against decoding alone\n{compare(ours, least, '2.5 in time')}"


def compare_flight(_folder: Path, runs: int, profile: bool) -> str:
    one, four = measure(runs, profile, ("reduction_alone", Path("1")), ("reduction_alone", Path("4")))
    return (
        "reduction alone of flights at 10 Hz\n"
        f"  1 h {one.seconds:.2f} s (aim 0.5), 4 h {four.seconds:.2f} s; "
        f"ratio {four.seconds / one.seconds:.2f} (aim 4.4)\n"
        f"  above the material {one.added_mib:.0f} and {four.added_mib:.0f} MiB"
    )


COMPARISONS: Mapping[str, Callable[[Path, int, bool], str]] = {
    "ulog": compare_ulog,
    "batch": compare_batch,
    "flight": compare_flight,
}


def main(arguments: list[str] | None = None) -> int:
    parser = argparse.ArgumentParser(description=__doc__, formatter_class=argparse.RawDescriptionHelpFormatter)
    parser.add_argument("which", nargs="*", help=f"of {', '.join(COMPARISONS)}; default: all")
    parser.add_argument("--runs", type=int, default=FEWEST_RUNS)
    parser.add_argument("--profile", action="store_true")
    parser.add_argument("--child", nargs=2, metavar=("WORK", "PATH"), help=argparse.SUPPRESS)
    options = parser.parse_args(arguments)
    if options.child:
        name, path = options.child
        print(json.dumps(run_here(name, Path(path), options.profile)))
        return 0
    with tempfile.TemporaryDirectory() as folder:
        for which in options.which or COMPARISONS:
            print(COMPARISONS[which](Path(folder), options.runs, options.profile), flush=True)
    return 0


if __name__ == "__main__":
    sys.exit(main())
