"""The solver against certified values.

Source: NIST Statistical Reference Datasets, Nonlinear Least Squares Regression (itl.nist.gov/div898/strd), files as
received. The certified values are in the files' heads; the tables beside them were read from there, but for Rat43,
whose head prints 9 degrees of freedom where its own residual standard deviation needs 15 - 4 = 11.
"""

from __future__ import annotations

import csv
from collections.abc import Callable
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pytest

from bandproof.analysis.least_squares import least_squares

OUTSIDE = Path(__file__).parents[1] / "outside"

# As suggested by the printed 10 digits and the conditioning of the worst set.
PARAMETER, DEVIATION, SQUARES = 1e-5, 1e-4, 1e-8
# Its residual sum of squares, 1.43e-25, lies below the rounding of the data's own digits.
PARAMETERS_ONLY = "Lanczos1"


def _peaks(x, b):
    return (
        b[0] * np.exp(-b[1] * x)
        + b[2] * np.exp(-((x - b[3]) ** 2) / b[4] ** 2)
        + b[5] * np.exp(-((x - b[6]) ** 2) / b[7] ** 2)
    )


def _cubics(x, b):
    return (b[0] + b[1] * x + b[2] * x**2 + b[3] * x**3) / (1 + b[4] * x + b[5] * x**2 + b[6] * x**3)


def _decays(x, b):
    return b[0] * np.exp(-b[1] * x) + b[2] * np.exp(-b[3] * x) + b[4] * np.exp(-b[5] * x)


def _chwirut(x, b):
    return np.exp(-b[0] * x) / (b[1] + b[2] * x)


def _misra(x, b):
    return b[0] * (1 - np.exp(-b[1] * x))


def _enso(x, b):
    return (
        b[0]
        + b[1] * np.cos(2 * np.pi * x / 12)
        + b[2] * np.sin(2 * np.pi * x / 12)
        + b[4] * np.cos(2 * np.pi * x / b[3])
        + b[5] * np.sin(2 * np.pi * x / b[3])
        + b[7] * np.cos(2 * np.pi * x / b[6])
        + b[8] * np.sin(2 * np.pi * x / b[6])
    )


MODELS: dict[str, Callable] = {
    "Bennett5": lambda x, b: b[0] * (b[1] + x) ** (-1 / b[2]),
    "BoxBOD": _misra,
    "Chwirut1": _chwirut,
    "Chwirut2": _chwirut,
    "DanWood": lambda x, b: b[0] * x ** b[1],
    "ENSO": _enso,
    "Eckerle4": lambda x, b: b[0] / b[1] * np.exp(-0.5 * ((x - b[2]) / b[1]) ** 2),
    "Gauss1": _peaks,
    "Gauss2": _peaks,
    "Gauss3": _peaks,
    "Hahn1": _cubics,
    "Kirby2": lambda x, b: (b[0] + b[1] * x + b[2] * x**2) / (1 + b[3] * x + b[4] * x**2),
    "Lanczos1": _decays,
    "Lanczos2": _decays,
    "Lanczos3": _decays,
    "MGH09": lambda x, b: b[0] * (x**2 + x * b[1]) / (x**2 + x * b[2] + b[3]),
    "MGH10": lambda x, b: b[0] * np.exp(b[1] / (x + b[2])),
    "MGH17": lambda x, b: b[0] + b[1] * np.exp(-x * b[3]) + b[2] * np.exp(-x * b[4]),
    "Misra1a": _misra,
    "Misra1b": lambda x, b: b[0] * (1 - (1 + b[1] * x / 2) ** -2),
    "Misra1c": lambda x, b: b[0] * (1 - (1 + 2 * b[1] * x) ** -0.5),
    "Misra1d": lambda x, b: b[0] * b[1] * x / (1 + b[1] * x),
    "Nelson": lambda x, b: b[0] - b[1] * x[0] * np.exp(-b[2] * x[1]),
    "Rat42": lambda x, b: b[0] / (1 + np.exp(b[1] - b[2] * x)),
    "Rat43": lambda x, b: b[0] / (1 + np.exp(b[1] - b[2] * x)) ** (1 / b[3]),
    "Roszman1": lambda x, b: b[0] - b[1] * x - np.arctan(b[2] / (x - b[3])) / np.pi,
    "Thurber": _cubics,
}


@dataclass(frozen=True)
class Certified:
    name: str
    x: np.ndarray
    y: np.ndarray
    start: np.ndarray  # (2, P)
    values: np.ndarray
    deviations: np.ndarray
    squares: float
    dof: int


def _certified(name: str) -> Certified:
    with (OUTSIDE / "nist_strd_certified.csv").open() as table:
        rows = [row for row in csv.DictReader(table) if row["dataset"] == name]
    lines = (OUTSIDE / "nist_strd" / f"{name}.dat").read_text().splitlines()
    data = np.array([[float(word) for word in line.split()] for line in lines[60:] if line.strip()])
    columns = {
        key: np.array([float(row[key]) for row in rows]) for key in ("start1", "start2", "certified", "certified_sd")
    }
    return Certified(
        name,
        x=data[:, 1:].T if name == "Nelson" else data[:, 1],
        y=np.log(data[:, 0]) if name == "Nelson" else data[:, 0],
        start=np.array([columns["start1"], columns["start2"]]),
        values=columns["certified"],
        deviations=columns["certified_sd"],
        squares=float(rows[0]["residual_ss"]),
        dof=int(rows[0]["dof"]),
    )


def _residual(case: Certified):
    model = MODELS[case.name]

    def function(theta, which):
        residual = np.array([model(case.x, b) for b in theta]) - case.y
        jacobian = np.stack([_derivatives(model, case.x, b) for b in theta])
        return np.concatenate([jacobian, residual[..., None]], axis=-1)

    return function


def _derivatives(model, x, b):
    """By complex steps: exact to rounding for these analytic models."""
    columns = []
    for i, value in enumerate(b):
        step = 1e-100 * max(abs(value), 1e-30)
        moved = b.astype(complex)
        moved[i] += 1j * step
        columns.append(model(x.astype(complex), moved).imag / step)
    return np.stack(columns, axis=-1)


@pytest.mark.parametrize("name", sorted(MODELS))
def test_certified_parameters_reproduce_the_certified_sum_of_squares(name):
    case = _certified(name)
    residual = MODELS[name](case.x, case.values) - case.y
    if name != PARAMETERS_ONLY:
        assert residual @ residual == pytest.approx(case.squares, rel=1e-9)


@pytest.mark.parametrize("name", sorted(MODELS))
def test_start_2_leads_to_the_certified_values(name):
    case = _certified(name)
    found = least_squares(_residual(case), case.start[1:])
    assert found.status == ("converged",)
    np.testing.assert_allclose(found.theta[0], case.values, rtol=PARAMETER)
    if name != PARAMETERS_ONLY:
        assert found.squares[0] == pytest.approx(case.squares, rel=SQUARES)
        deviations = np.sqrt(np.diag(found.covariance[0]) * found.squares[0] / case.dof)
        np.testing.assert_allclose(deviations, case.deviations, rtol=DEVIATION)


@pytest.mark.parametrize("name", ["Misra1a", "Rat42", "Gauss1"])  # of residuals small enough for it
def test_the_last_step_gains_what_a_coarse_offset_left(name):
    case = _certified(name)
    found = least_squares(_residual(case), case.start[1:], offset=1e-2)
    off = np.abs(found.theta[0] - case.values) / case.deviations
    assert found.status == ("converged",)
    assert (off < 1e-3).all()


def test_problems_solved_together_are_solved_as_alone():
    case = _certified("Thurber")
    starts = np.concatenate([case.start, case.values[None]])
    together = least_squares(_residual(case), starts)
    alone = [least_squares(_residual(case), start[None]) for start in starts]
    np.testing.assert_allclose(together.theta, np.concatenate([one.theta for one in alone]), rtol=1e-12)
    assert together.status == tuple(one.status[0] for one in alone)
    np.testing.assert_array_equal(together.steps, [one.steps[0] for one in alone])


def test_a_model_that_is_not_finite_is_told_and_spares_the_others():
    x, y = np.array([1.0, 2.0, 3.0]), np.array([2.0, 4.0, 8.0])

    def growth(theta, which):
        model = np.exp(theta * x)
        return np.stack([model * x, model - y], axis=-1)

    found = least_squares(growth, np.array([[np.nan], [0.1]]))
    assert found.status == ("not finite", "converged")
    assert found.theta[1, 0] == pytest.approx(np.log(2.0), rel=1e-9)


def test_too_few_steps_are_told():
    case = _certified("Thurber")
    assert least_squares(_residual(case), case.start[:1], step_limit=2).status == ("step limit",)
