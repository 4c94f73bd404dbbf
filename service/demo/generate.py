"""Make the demonstration's specification and lots; run ``python -m service.demo.generate`` to write them anew.

The plant, its premix and every number are invented.  Each lot has twelve
sachets.  A lot is standard normal noise from the project's own counter-based
draws, shaped so that it shows one thing, and rounded as a laboratory reports.
"""

from __future__ import annotations

import csv
import json
from collections.abc import Mapping
from pathlib import Path
from typing import Any

import numpy as np

from service.stats.arrays import Matrix, Vector
from service.stats.randomisation import normal_batches

HERE = Path(__file__).parent
SEED = "premix demonstration 7"

NAMES = ("iron", "zinc", "calcium", "magnesium", "moisture")
UNITS = ("mg/kg", "mg/kg", "g/kg", "g/kg", "%")
DECIMALS = (1, 1, 2, 2, 3)
TARGET = np.array([600.0, 450.0, 120.0, 60.0, 4.2])
DEVIATIONS = np.array([12.0, 9.0, 2.4, 1.3, 0.15])
CORRELATION = np.array(
    [
        [1.0, 0.75, 0.30, 0.25, -0.15],
        [0.75, 1.0, 0.25, 0.30, -0.10],
        [0.30, 0.25, 1.0, 0.55, -0.20],
        [0.25, 0.30, 0.55, 1.0, -0.25],
        [-0.15, -0.10, -0.20, -0.25, 1.0],
    ]
)
REFERENCE_DEGREES_OF_FREEDOM = 118
SACHETS = 12

_LOG_DEVIATION = 1.1
_SKEWED_DRAW = 466

FILES = {
    "clean": "PX-2601.csv",
    "joint-shift": "PX-2602.csv",
    "one-shift": "PX-2603.csv",
    "outlying-sachet": "PX-2604.csv",
    "skewed": "PX-2605.csv",
    "wrong-unit": "PX-2606.csv",
}
"""What each lot shows, and its file."""


def specification() -> dict[str, Any]:
    """Return the demonstration's specification as it is drafted."""
    covariance = CORRELATION * np.outer(DEVIATIONS, DEVIATIONS)
    return {
        "code": "premix-a",
        "title": "Mineral premix A for bakeries, sachets of 1 kg",
        "characteristics": [
            {"name": name, "measurement_unit": unit, "target": float(target), "lower_bound": 0.0}
            for name, unit, target in zip(NAMES, UNITS, TARGET, strict=True)
        ],
        "covariance": {
            "kind": "reference",
            "matrix": [[round(float(entry), 6) for entry in row] for row in covariance],
            "degrees_of_freedom": REFERENCE_DEGREES_OF_FREEDOM,
        },
        "significance_level": 0.01,
        "question": {"form": "difference"},
    }


def lots() -> Mapping[str, tuple[tuple[str, ...], Matrix]]:
    """Return, for each thing to show, the units of measurement and the values, shape (12, 5)."""
    wrong = tuple("g/kg" if name == "zinc" else unit for name, unit in zip(NAMES, UNITS, strict=True))
    in_grams = np.where(np.array(NAMES) == "zinc", 1e-3, 1.0)
    return {
        "clean": (UNITS, _reported(_sample("clean"))),
        "joint-shift": (UNITS, _reported(_sample("joint-shift", mean=np.array([0.56, -0.56, 0.05, 0.0, 0.0])))),
        "one-shift": (UNITS, _reported(_sample("one-shift", mean=np.array([0.0, 0.0, -1.5, -0.2, 0.2])))),
        "outlying-sachet": (UNITS, _reported(_with_outlying_sachet(_sample("outlying-sachet")))),
        "skewed": (UNITS, _reported(_skewed())),
        "wrong-unit": (wrong, np.round(_reported(_sample("wrong-unit")) * in_grams, 4)),
    }


def _noise(shows: str) -> Matrix:
    batch: Matrix = next(normal_batches(f"{SEED}: {shows}", SACHETS, len(NAMES), 1))[0]
    return batch


def _sample(shows: str, mean: Vector | None = None) -> Matrix:
    """Return correlated deviations in standard deviations, their mean as asked to the last digit."""
    noise = _noise(shows) @ np.linalg.cholesky(CORRELATION).T
    return np.asarray(noise if mean is None else noise - noise.mean(axis=0) + mean)


def _with_outlying_sachet(deviations: Matrix) -> Matrix:
    """Make the eighth sachet short of iron and zinc and far too moist, as if its seal had failed."""
    changed = deviations.copy()
    changed[7] = [-3.1, -2.4, -0.6, -0.4, 4.6]
    return changed


def _skewed() -> Matrix:
    """Return deviations whose parts are log-normal: long tails upwards, mean and spread as specified.

    Of many draws, the one that is taken shows skewness without any sachet that lies apart by itself.
    """
    noise = next(normal_batches(f"{SEED}: skewed", SACHETS, len(NAMES), _SKEWED_DRAW + 1))[_SKEWED_DRAW]
    variance = _LOG_DEVIATION**2
    parts = (np.exp(_LOG_DEVIATION * noise) - np.exp(variance / 2)) / np.sqrt(np.expm1(variance) * np.exp(variance))
    shaped = parts @ np.linalg.cholesky(CORRELATION).T
    return np.asarray(shaped - shaped.mean(axis=0))


def _reported(deviations: Matrix) -> Matrix:
    values = TARGET + deviations * DEVIATIONS
    return np.stack([np.round(column, d) for column, d in zip(values.T, DECIMALS, strict=True)], axis=1)


def write() -> None:
    """Write specification and lots beside this file."""
    document = json.dumps(specification(), indent=2) + "\n"
    (HERE / "specification.json").write_text(document, encoding="utf-8")
    for shows, (units, values) in lots().items():
        with (HERE / "lots" / FILES[shows]).open("w", newline="", encoding="utf-8") as file:
            writer = csv.writer(file, lineterminator="\n")
            writer.writerow(["sachet", *(f"{name} [{unit}]" for name, unit in zip(NAMES, units, strict=True))])
            writer.writerows([i + 1, *map(repr, row)] for i, row in enumerate(values.tolist()))


if __name__ == "__main__":
    write()
