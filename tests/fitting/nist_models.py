"""The 27 model functions of the NIST StRD nonlinear-regression sets (source named in nist_strd_nonlinear.json).

Each takes the parameter vector b (p) and the predictor x, and gives the response; all are analytic, so a complex step
gives their Jacobian to rounding. Nelson has two predictors and the logarithm of the response.
"""

from __future__ import annotations

from collections.abc import Callable

import numpy as np

Model = Callable[[np.ndarray, np.ndarray], np.ndarray]


def _gauss(b, x):
    decay = b[0] * np.exp(-b[1] * x)
    return decay + b[2] * np.exp(-(((x - b[3]) / b[4]) ** 2)) + b[5] * np.exp(-(((x - b[6]) / b[7]) ** 2))


def _lanczos(b, x):
    return b[0] * np.exp(-b[1] * x) + b[2] * np.exp(-b[3] * x) + b[4] * np.exp(-b[5] * x)


def _chwirut(b, x):
    return np.exp(-b[0] * x) / (b[1] + b[2] * x)


def _cubic_ratio(b, x):
    return (b[0] + x * (b[1] + x * (b[2] + x * b[3]))) / (1 + x * (b[4] + x * (b[5] + x * b[6])))


def _enso(b, x):
    turn = 2 * np.pi * x
    out = b[0] + b[1] * np.cos(turn / 12) + b[2] * np.sin(turn / 12)
    for k in (3, 6):
        out = out + b[k + 1] * np.cos(turn / b[k]) + b[k + 2] * np.sin(turn / b[k])
    return out


MODELS: dict[str, Model] = {
    "Bennett5": lambda b, x: b[0] * (b[1] + x) ** (-1 / b[2]),
    "BoxBOD": lambda b, x: b[0] * (1 - np.exp(-b[1] * x)),
    "Chwirut1": _chwirut,
    "Chwirut2": _chwirut,
    "DanWood": lambda b, x: b[0] * x ** b[1],
    "ENSO": _enso,
    "Eckerle4": lambda b, x: b[0] / b[1] * np.exp(-0.5 * ((x - b[2]) / b[1]) ** 2),
    "Gauss1": _gauss,
    "Gauss2": _gauss,
    "Gauss3": _gauss,
    "Hahn1": _cubic_ratio,
    "Kirby2": lambda b, x: (b[0] + b[1] * x + b[2] * x**2) / (1 + b[3] * x + b[4] * x**2),
    "Lanczos1": _lanczos,
    "Lanczos2": _lanczos,
    "Lanczos3": _lanczos,
    "MGH09": lambda b, x: b[0] * (x**2 + x * b[1]) / (x**2 + x * b[2] + b[3]),
    "MGH10": lambda b, x: b[0] * np.exp(b[1] / (x + b[2])),
    "MGH17": lambda b, x: b[0] + b[1] * np.exp(-x * b[3]) + b[2] * np.exp(-x * b[4]),
    "Misra1a": lambda b, x: b[0] * (1 - np.exp(-b[1] * x)),
    "Misra1b": lambda b, x: b[0] * (1 - (1 + b[1] * x / 2) ** -2),
    "Misra1c": lambda b, x: b[0] * (1 - (1 + 2 * b[1] * x) ** -0.5),
    "Misra1d": lambda b, x: b[0] * b[1] * x / (1 + b[1] * x),
    "Nelson": lambda b, x: b[0] - b[1] * x[:, 0] * np.exp(-b[2] * x[:, 1]),
    "Rat42": lambda b, x: b[0] / (1 + np.exp(b[1] - b[2] * x)),
    "Rat43": lambda b, x: b[0] / (1 + np.exp(b[1] - b[2] * x)) ** (1 / b[3]),
    "Roszman1": lambda b, x: b[0] - b[1] * x - np.arctan(b[2] / (x - b[3])) / np.pi,
    "Thurber": _cubic_ratio,
}


def split(name: str, data: list[list[float]]) -> tuple[np.ndarray, np.ndarray]:
    """Response (n) and predictor (n, or n by 2 for Nelson) of a set's rows."""
    rows = np.array(data)
    if name == "Nelson":
        return np.log(rows[:, 0]), rows[:, 1:]
    return rows[:, 0], rows[:, 1]


def jacobian(model: Model, b: np.ndarray, x: np.ndarray) -> np.ndarray:
    """d model / d b (n, p) by complex steps (W. Squire and G. Trapp, SIAM Review 40, 110, 1998): exact to rounding."""
    columns = []
    for i, value in enumerate(b):
        step = 1e-30 * max(abs(value), 1e-10)
        moved = b.astype(complex)
        moved[i] += 1j * step
        columns.append(np.imag(model(moved, x)) / step)
    return np.column_stack(columns)
