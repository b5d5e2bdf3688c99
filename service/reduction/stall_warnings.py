"""Stall warnings: the spans of time in which the margin was below a level, each with the numbers at its worst instant.

What triggers
-------------
The margin itself, not its lower bound. The default thresholds already leave room for what is uncertain; a bound would
count it twice, and would make the same flying a warning after one calibration and none after another. The bound stands
beside it in every warning and says how sure it is.

Default thresholds, argued for a small aircraft
-----------------------------------------------
There is no published rule for it. The rules for certificated aeroplanes, read with care:

- 14 CFR 25.207(c), CS 25.207(c): warning at 5 kt or 5 % above the stall, whichever is greater. Written for large
  aeroplanes: at a stall speed of 11.2 m/s, 5 kt is 23 %, while 5 % is 0.56 m/s, hardly more than one gust of light air
  (0.4 m/s root mean square, this project's family of that name) or than the doubt in the stall speed.
- 14 CFR 25.207(e): recovery must work in turns of 1.5 g, where the stall speed is 22 % higher.
- Old 14 CFR 23.73 (recalled, not read): an approach is flown at 1.3 times the stall speed.

`warning` (red) below 0.10: at 11.2 m/s that is 1.1 m/s, little more than one gust of moderate air (0.9 m/s root mean
square) from the stall; so is a pull to 1.21 g, or a bank of 34 degrees from level flight. It demands action at once,
so it must not be on in ordinary flight.

`caution` (amber) below 0.30: slower than an approach is planned. At 11.2 m/s it holds the 5 kt of the rule (0.23) and
two gusts of light air on top; from there a pull to 1.69 g or a bank of 54 degrees reaches the stall. A loiter at 1.3
times the level stall speed and 30 degrees of bank has a margin of 0.21: a caution, as it should be.

Both are settable. They count the stall speed at the actual load factor, where the rules mean level flight.

Hysteresis and hold
-------------------
A level is on from the first sample below its threshold and off at the first one `RELEASE_STEP` above it. A recovery
shorter than `hold_s`, or of a single sample, is none; what is then shorter than `hold_s` is not reported: a wing
answers the mean over some tenths of a second, and a single sample may be noise. A warning lies within a caution; both
are listed, each with its own span, which begins and ends at a sample.
"""

from dataclasses import replace
from typing import Final

import numpy as np

from service.airdata.turning_flight import load_factor_from_bank
from service.domain.arrays import BoolArray, FloatArray, IntArray
from service.domain.codes import Flag, Level
from service.domain.results import StallMargins, StallWarning
from service.domain.settings import Aircraft, WarningSettings

RELEASE_STEP: Final = 0.02
"""Above a threshold; some three times the sample-to-sample noise of a margin (1 Pa is 0.7 % at 11 m/s)."""
LONGEST_BRIDGED_STEPS: Final = 3.0
"""A span ends where the margin is unknown for longer than this many sampling steps, and than `hold_s`."""
SHORTEST_RECOVERY_STEPS: Final = 2.0
MOST_SPANS: Final = 1000
"""Per level. A flight with more is chatter: the shortest recovery is doubled until it has no more."""


def stall_warnings(
    margins: StallMargins, in_force: IntArray, aircraft: Aircraft, settings: WarningSettings
) -> tuple[StallMargins, tuple[StallWarning, ...]]:
    """Warnings in order of their start, and the margins with `CAUTION` and `WARNING` flagged within them.

    Parameters
    ----------
    margins : n samples.
    in_force : (n,) index of the configuration in force at each sample.
    """
    known = np.flatnonzero(np.isfinite(margins.margin))
    flags = margins.flags.copy()
    found = []
    for level, threshold, flag in (
        (Level.CAUTION, settings.caution_below, Flag.CAUTION),
        (Level.WARNING, settings.warning_below, Flag.WARNING),
    ):
        for first, last in _spans(margins.time_s[known], margins.margin[known], threshold, settings.hold_s):
            span = slice(int(known[first]), int(known[last]) + 1)
            flags[span] |= np.uint32(flag)
            found.append(_warning(level, span, margins, in_force, aircraft))
    return replace(margins, flags=flags), tuple(sorted(found, key=lambda warning: warning.start_s))


def _spans(time_s: FloatArray, margin: FloatArray, threshold: float, hold_s: float) -> list[tuple[int, int]]:
    """First and last index of every span below `threshold`, by the rules of the module; (n,) without NaN."""
    if not time_s.size:
        return []
    steps = np.diff(time_s)
    step_s = float(np.median(steps)) if steps.size else 0.0
    resumes = np.concatenate([[True], steps > max(hold_s, LONGEST_BRIDGED_STEPS * step_s)])
    on = _with_hysteresis(margin, threshold, resumes)
    ends_here = np.concatenate([resumes[1:], [True]])
    before, after = np.concatenate([[False], on[:-1]]), np.concatenate([on[1:], [False]])
    first = np.flatnonzero(on & (~before | resumes))
    last = np.flatnonzero(on & (~after | ends_here))
    recovery_s = max(hold_s, SHORTEST_RECOVERY_STEPS * step_s)
    first, last = _merged(time_s, first, last, recovery_s)
    while first.size > MOST_SPANS:
        recovery_s *= 2.0
        first, last = _merged(time_s, first, last, recovery_s)
    held = time_s[last] - time_s[first] + step_s >= hold_s * (1.0 - 1e-9)
    return list(zip(first[held].tolist(), last[held].tolist(), strict=True))


def _merged(time_s: FloatArray, first: IntArray, last: IntArray, recovery_s: float) -> tuple[IntArray, IntArray]:
    """The spans, joined where no more than `recovery_s` lies between them."""
    if not first.size:
        return first, last
    apart = time_s[first[1:]] - time_s[last[:-1]] > recovery_s * (1.0 + 1e-9)
    return first[np.concatenate([[True], apart])], last[np.concatenate([apart, [True]])]


def _with_hysteresis(margin: FloatArray, threshold: float, resumes: BoolArray) -> BoolArray:
    """(n,) whether the level is on; a sample between threshold and release keeps the state of the last decisive one."""
    below = margin < threshold
    decisive = below | (margin >= threshold + RELEASE_STEP) | resumes
    latest = np.maximum.accumulate(np.where(decisive, np.arange(margin.size), 0))
    return below[latest]


def _warning(level: Level, span: slice, margins: StallMargins, in_force: IntArray, aircraft: Aircraft) -> StallWarning:
    worst = span.start + int(np.nanargmin(margins.margin[span]))
    warning = StallWarning(
        level=level,
        start_s=float(margins.time_s[span.start]),
        end_s=float(margins.time_s[span.stop - 1]),
        minimum_margin=float(margins.margin[worst]),
        minimum_margin_lower_95=float(margins.margin_lower_95[worst]),
        indicated_margin=float(margins.indicated_margin[worst]),
        load_factor=float(margins.load_factor[worst]),
        configuration=aircraft.configurations[int(in_force[worst])].name,
        message="",
    )
    assumed = bool(margins.flags[worst] & np.uint32(Flag.NO_LOAD_FACTOR))
    return replace(warning, message=_message(warning, assumed, aircraft.maximum_bank_deg))


def _message(warning: StallWarning, assumed: bool, maximum_bank_deg: float | None) -> str:
    text = (
        f"{warning.level.value.capitalize()}: margin {_percent(warning.minimum_margin)} "
        f"(lower 95 % {_percent(warning.minimum_margin_lower_95)}) at load factor {warning.load_factor:.2f}"
        f"{', assumed for the maximum bank,' if assumed else ''} in configuration {warning.configuration}; "
        f"the uncorrected reading showed {_percent(warning.indicated_margin)}."
    )
    steepest = 0.0 if maximum_bank_deg is None else float(load_factor_from_bank(maximum_bank_deg))
    # nobody rolls into a turn out of a push-over
    if not steepest > warning.load_factor > 0.5:
        return text
    banked = (1.0 + warning.minimum_margin) * np.sqrt(warning.load_factor / steepest) - 1.0
    return f"{text} At this speed and the maximum bank of {maximum_bank_deg:g} degrees it is {_percent(banked)}."


def _percent(share: float) -> str:
    return f"{round(100.0 * share)} %" if np.isfinite(share) else "an unknown margin"
