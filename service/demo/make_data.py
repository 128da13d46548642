"""Make the raw data of the demo plant from stated true components; run once, the files are kept.

    python -m service.demo.make_data

Everything here is invented: a milk drying plant, line tower-1, at-line near-infrared analyzer nir-1,
whole-milk powder, moisture in per cent. The truth below is what an evaluation has to find again.
"""

from __future__ import annotations

import csv
from collections.abc import Iterable
from dataclasses import dataclass
from pathlib import Path
from typing import Final

import numpy as np

SEED: Final = 20260114
FOLDER: Final = Path(__file__).with_name("data")


@dataclass(frozen=True)
class Truth:
    """The true components; all in per cent moisture, standard deviations unless said otherwise."""

    repeatability: float = 0.045  # of one scan
    sample_specific: float = 0.060  # of the calibration model, anew with each sample
    between_days: float = 0.020  # of the analyzer, anew each day
    analyzer_bias: float = -0.020  # analyzer minus truth
    reference_repeatability: float = 0.050  # of one oven determination
    laboratory_bias: float = 0.050  # laboratory minus truth, ONE value common to all its results
    process_mean: float = 2.85
    process_standard_deviation: float = 0.10  # of lot means
    sampling: float = 0.030  # one sample against the lot's mean

    @property
    def bias(self) -> float:
        """Mean of analyzer minus reference: the two biases cannot be told apart by pairs."""
        return self.analyzer_bias - self.laboratory_bias

    @property
    def remainder(self) -> float:
        """What is left of the standard error of prediction when both repeatabilities are taken out."""
        return float(np.hypot(self.sample_specific, self.between_days))


TRUTH: Final = Truth()


def main() -> None:
    """Write the four files."""
    generator = np.random.default_rng(SEED)
    FOLDER.mkdir(exist_ok=True)
    _write("replicate-scans.csv", ("sample", "replicate", "reading"), _replicate_scans(generator))
    _write("oven-duplicates.csv", ("sample", "determination", "result"), _oven_duplicates(generator))
    _write("validation-pairs.csv", ("pair", "group", "reading", "reference"), _validation_pairs(generator))
    _write(
        "production-lots.csv",
        ("lot", "day", "time", "sample", "moisture", "distance_from_calibration_set", "sample_temperature"),
        _production_lots(generator),
    )


def _replicate_scans(generator: np.random.Generator) -> Iterable[tuple[object, ...]]:
    for sample in range(20):
        level = generator.uniform(2.0, 4.6) + generator.normal(0, TRUTH.remainder)
        for replicate in range(5):
            reading = level + generator.normal(0, TRUTH.repeatability)
            yield f"P{sample + 1:02d}", replicate + 1, f"{reading:.2f}"


def _oven_duplicates(generator: np.random.Generator) -> Iterable[tuple[object, ...]]:
    for sample in range(40):
        level = generator.uniform(2.0, 4.6) + TRUTH.laboratory_bias
        for determination in range(2):
            result = level + generator.normal(0, TRUTH.reference_repeatability)
            yield f"D{sample + 1:02d}", determination + 1, f"{result:.2f}"


def _validation_pairs(generator: np.random.Generator) -> Iterable[tuple[object, ...]]:
    """Twelve days of five pairs; every third pair is read twice and determined twice."""
    for day in range(12):
        day_effect = generator.normal(0, TRUTH.between_days)
        for pair in range(5):
            number = 5 * day + pair
            truth = generator.uniform(2.0, 4.6)
            shown = truth + TRUTH.analyzer_bias + day_effect + generator.normal(0, TRUTH.sample_specific)
            for _ in range(2 if number % 3 == 0 else 1):
                reading = shown + generator.normal(0, TRUTH.repeatability)
                reference = truth + TRUTH.laboratory_bias
                reference += generator.normal(0, TRUTH.reference_repeatability)
                yield f"V{number + 1:02d}", f"day-{day + 1:02d}", f"{reading:.2f}", f"{reference:.2f}"


def _production_lots(generator: np.random.Generator) -> Iterable[tuple[object, ...]]:
    """Ten lots a day for twenty days, one sample each, scanned twice."""
    for day in range(20):
        day_effect = generator.normal(0, TRUTH.between_days)
        for lot in range(10):
            truth = generator.normal(TRUTH.process_mean, TRUTH.process_standard_deviation)
            sample = truth + generator.normal(0, TRUTH.sampling)
            shown = sample + TRUTH.analyzer_bias + day_effect + generator.normal(0, TRUTH.sample_specific)
            temperature = generator.uniform(20, 26)
            for scan in range(2):
                reading = shown + generator.normal(0, TRUTH.repeatability)
                distance = generator.chisquare(6) / 6 + 0.2
                yield (
                    f"W{day + 1:02d}-{lot + 1:02d}",
                    day + 1,
                    f"{6 + lot:02d}:{12 + scan:02d}:04.120",
                    1,
                    f"{reading:.2f}",
                    f"{min(distance, 2.9):.1f}",
                    f"{temperature:.1f}",
                )


def _write(name: str, columns: tuple[str, ...], rows: Iterable[tuple[object, ...]]) -> None:
    with (FOLDER / name).open("w", newline="", encoding="utf-8") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(columns)
        writer.writerows(rows)


if __name__ == "__main__":
    main()
