"""The published batch of processes, and the classes it leaves out."""

import json
from pathlib import Path

import numpy as np

from fitters.process import ProcessModel

BATCH = Path(__file__).parents[1] / "published" / "test_batch.json"

#: Rows of a log, and how many effective dead times they span at most: a logger that sees the
#: dead time at least three times over (common practice: log interval a quarter of it).
ROWS = 300
LONGEST = 100.0
#: Sums of lags a settling test spans at most: three moves held four to five each.
HOLDS = 15.0


def built(spec):
    """Turn gain, lags, zeros, quadratic factors, integrators and dead time into a process."""
    numerator, denominator = np.array([float(spec.get("k", 1.0))]), np.ones(1)
    for lag in spec.get("lags", []):
        if lag:
            denominator = np.polymul(denominator, [lag, 1.0])
    for zero in spec.get("zeros", []):
        numerator = np.polymul(numerator, [zero, 1.0])
    for square, linear in spec.get("quad", []):
        denominator = np.polymul(denominator, [square, linear, 1.0])
    for _ in range(spec.get("ints", 0)):
        denominator = np.polymul(denominator, [1.0, 0.0])
    return ProcessModel(
        numerator=tuple(numerator), denominator=tuple(denominator), dead_time=float(spec.get("delay", 0.0))
    )


def span_of(spec):
    """Length of a bump test: until settled, but no longer than the log interval allows."""
    lags = sorted([*spec.get("lags", []), *(q[1] for q in spec.get("quad", []))], reverse=True)
    inverse = sum(-z for z in spec.get("zeros", []) if z < 0)
    total = sum(lags) + spec.get("delay", 0.0) + sum(abs(z) for z in spec.get("zeros", []))
    kept = lags if spec.get("ints", 0) else lags[1:]
    # effective dead time by the half rule: Skogestad (2003), J. Process Control 13, 291-309
    effective = spec.get("delay", 0.0) + inverse + (kept[0] / 2.0 + sum(kept[1:]) if kept else 0.0)
    return min(HOLDS * total, LONGEST * effective)


def published():
    """Give (name, class, process, span) of the 133 published processes."""
    for plant in json.loads(BATCH.read_text(encoding="utf-8"))["plants"]:
        spec = plant["spec"]
        kind = {"P6": "integrating", "P8": "inverse"}.get(plant["family"], "settling")
        yield f"{plant['family']} {plant['params']}", kind, built(spec), span_of(spec)


def further():
    """Give the classes the batch lacks: ringing, inverse response, levels with it, motion."""
    for damping in (0.1, 0.2, 0.3, 0.5, 0.7 - 0.05):
        for dead_time in (0.2, 1.0):
            process = ProcessModel(
                numerator=(1.0,), denominator=(1.0, 2.0 * damping, 1.0), dead_time=dead_time
            )
            yield f"damping {damping} dead time {dead_time}", "ringing", process, 60.0
    for zero in (0.5, 1.0, 2.0):
        process = ProcessModel(numerator=(-zero, 1.0), denominator=(2.0, 3.0, 1.0), dead_time=0.3)
        yield f"inverse {zero}", "inverse", process, HOLDS * (3.0 + zero)
    for zero in (0.5, 1.0, 2.0, 4.0):
        process = ProcessModel(numerator=(-zero, 1.0), denominator=(1.0, 1.0, 0.0), dead_time=0.3)
        yield f"level with inverse {zero}", "integrating inverse", process, HOLDS * (2.0 + zero)
    for dead_time in (0.2, 1.0):
        process = ProcessModel(numerator=(1.0,), denominator=(1.0, 0.0, 0.0), dead_time=dead_time)
        yield f"double integrator {dead_time}", "double integrating", process, HOLDS * (1.0 + dead_time)


def class_of(process):
    """Name the class a person would see in the bump."""
    if process.integrators:
        words = (
            ["double"] * (process.integrators > 1)
            + ["integrating"]
            + ["inverse"] * bool(process.inverse_zeros.size)
        )
        return " ".join(words)
    if process.inverse_zeros.size:
        return "inverse"
    poles = process.poles
    rings = poles.size and np.min(-poles.real / np.abs(poles)) < 0.69  # 0.7 itself is not called ringing
    return "ringing" if rings else "settling"
