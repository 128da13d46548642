"""Make raw data of moisture for the further study designs, from stated true components.

Drawn by a generator of its own, so that the other files of the demo do not depend on it. The seed is a date,
taken as it came; a test repeats all with other seeds and counts how often the stated intervals hold.
"""

from __future__ import annotations

from collections.abc import Iterator
from typing import Final

import numpy as np

SEED: Final = 20261201

# Standard deviations, % moisture.
READING: Final = 0.045
BETWEEN_DAYS: Final = 0.030
BETWEEN_RUNS: Final = 0.025
SAMPLING: Final = 0.060
BETWEEN_LOTS: Final = 0.100
SAMPLE_BY_INSTRUMENT: Final = 0.040
BETWEEN_INSTRUMENTS: Final = 0.050
BETWEEN_SESSIONS: Final = 0.020
# The check sample: what it is known to hold, and how far the analyzer was off before and after the change.
ASSIGNED: Final = 3.00
BIAS_BEFORE: Final = -0.020
BIAS_AFTER: Final = 0.100
SESSIONS: Final = 24  # of each calibration
# Readings of one held sample hang together: each takes over this part of the deviation before it.
CARRIED_OVER: Final = 0.4
# The running process wanders: so much moisture, and so many minutes until 1/e of a deviation is left.
WANDERING: Final = 0.100
MINUTES_REMEMBERED: Final = 20.0
STREAM_MINUTES: Final = 1200
# The operator takes back this part of what the analyzer shows off the set point, lot by lot.
STEERED: Final = 0.5
SET_POINT: Final = 2.85

Rows = Iterator[tuple[object, ...]]
Table = tuple[tuple[str, ...], list[tuple[object, ...]]]


def tables(seed: int) -> dict[str, Table]:
    """Draw the table of every design, under the name of its file."""
    draw = np.random.default_rng(seed)
    return {
        "moisture-days-and-runs": (("day", "run", "reading"), list(_days_and_runs(draw))),
        "moisture-sampling": (("target", "sample", "analysis", "result"), list(_sampling(draw))),
        "moisture-held-sample": (("reading",), list(_held_sample(draw))),
        "moisture-check-samples": (
            ("session", "sample", "result", "assigned_value"),
            list(_check_samples(draw)),
        ),
        "moisture-fleet": (("sample", "instrument", "replicate", "reading"), list(_fleet(draw))),
        "moisture-production": (("period", "lot", "sample", "reading"), list(_production(draw))),
        "moisture-stream": (("position", "reading"), list(_stream(draw))),
    }


def _days_and_runs(draw: np.random.Generator) -> Rows:
    """Scan one held sample on twelve days, in three runs of two scans."""
    for day in range(12):
        of_day = draw.normal(2.90, BETWEEN_DAYS)
        for run in range(3):
            of_run = draw.normal(of_day, BETWEEN_RUNS)
            for _ in range(2):
                yield f"day-{day + 1:02d}", f"run-{run + 1}", _text(draw.normal(of_run, READING))


def _sampling(draw: np.random.Generator) -> Rows:
    """Take two samples of each of sixteen lots and scan each twice."""
    for lot in range(16):
        of_lot = draw.normal(SET_POINT, BETWEEN_LOTS)
        for sample in range(2):
            of_sample = draw.normal(of_lot, SAMPLING)
            for scan in range(2):
                yield f"L{lot + 1:02d}", f"S{sample + 1}", scan + 1, _text(draw.normal(of_sample, READING))


def _held_sample(draw: np.random.Generator) -> Rows:
    """Read one held sample three hundred times at equal steps."""
    deviation = draw.normal(0, READING)
    for _ in range(300):
        yield (_text(2.90 + deviation),)
        innovation = draw.normal(0, READING * np.sqrt(1 - CARRIED_OVER**2))
        deviation = CARRIED_OVER * deviation + innovation


def _check_samples(draw: np.random.Generator) -> Rows:
    """Read the check sample twice a session; half way the calibration is changed, and the bias with it."""
    for session in range(2 * SESSIONS):
        bias = BIAS_BEFORE if session < SESSIONS else BIAS_AFTER
        shown = draw.normal(ASSIGNED + bias, BETWEEN_SESSIONS)
        for _ in range(2):
            yield f"C{session + 1:02d}", "K1", _text(draw.normal(shown, READING)), _text(ASSIGNED)


def _fleet(draw: np.random.Generator) -> Rows:
    """Read ten samples twice on each of three analyzers."""
    instruments = draw.normal(0, BETWEEN_INSTRUMENTS, 3)
    for sample in range(10):
        truth = draw.uniform(2.2, 4.4)
        for number, instrument in enumerate(instruments):
            shown = draw.normal(truth + instrument, SAMPLE_BY_INSTRUMENT)
            for replicate in range(2):
                reading = _text(draw.normal(shown, READING))
                yield f"F{sample + 1:02d}", f"nir-{number + 1}", replicate + 1, reading


def _production(draw: np.random.Generator) -> Rows:
    """Make forty lots over eight weeks, steered by the analyzer; its calibration changes after four weeks."""
    process = SET_POINT
    for lot in range(40):
        bias = BIAS_BEFORE if lot < 20 else BIAS_AFTER
        of_lot = draw.normal(process + bias, BETWEEN_LOTS)
        seen = []
        for sample in range(2):
            of_sample = draw.normal(of_lot, SAMPLING)
            for _ in range(2):
                seen.append(draw.normal(of_sample, READING))
                yield f"week-{lot // 5 + 1}", f"R{lot + 1:02d}", f"S{sample + 1}", _text(seen[-1])
        process -= STEERED * (float(np.mean(seen)) - SET_POINT)


def _stream(draw: np.random.Generator) -> Rows:
    """Read the running process once a minute for twenty hours; each reading has its own error."""
    kept = np.exp(-1 / MINUTES_REMEMBERED)
    deviation = draw.normal(0, WANDERING)
    for minute in range(STREAM_MINUTES):
        yield minute, _text(SET_POINT + deviation + draw.normal(0, READING))
        deviation = kept * deviation + draw.normal(0, WANDERING * np.sqrt(1 - kept**2))


def _text(value: float) -> str:
    return f"{value:.2f}"
