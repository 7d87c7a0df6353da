"""What the study of calibration draws: numbers of mean 0 and variance 1, by NumPy."""

from __future__ import annotations

import math
from collections.abc import Callable

import numpy as np
from numpy.typing import NDArray

Rng = np.random.Generator
Draw = Callable[[Rng, tuple[int, ...]], NDArray]


def normal(rng: Rng, shape: tuple[int, ...]) -> NDArray:
    return rng.standard_normal(shape)


def exponential(rng: Rng, shape: tuple[int, ...]) -> NDArray:
    return rng.standard_exponential(shape) - 1


def uniform(rng: Rng, shape: tuple[int, ...]) -> NDArray:
    return math.sqrt(12) * (rng.random(shape) - 0.5)


def laplace(rng: Rng, shape: tuple[int, ...]) -> NDArray:
    return rng.laplace(scale=math.sqrt(0.5), size=shape)


def lognormal(sigma: float) -> Draw:
    mean = math.exp(sigma**2 / 2)
    sd = mean * math.sqrt(math.expm1(sigma**2))
    return lambda rng, shape: (np.exp(sigma * rng.standard_normal(shape)) - mean) / sd


def student(df: float) -> Draw:
    return lambda rng, shape: rng.standard_t(df, shape) * math.sqrt((df - 2) / df)


def rare(share: float) -> Draw:
    """1 with a small probability, else 0: a flag."""
    sd = math.sqrt(share * (1 - share))
    return lambda rng, shape: ((rng.random(shape) < share) - share) / sd


def garch(alpha: float, beta: float) -> Draw:
    """The 40th value of garch(1,1) paths from the mean variance: skewed in no way, with long tails."""

    def draw(rng: Rng, shape: tuple[int, ...]) -> NDArray:
        h = np.ones(shape)
        for _ in range(40):
            x = np.sqrt(h) * rng.standard_normal(shape)
            h = 1 - alpha - beta + alpha * x * x + beta * h
        return x

    return draw


def nothing(level: float) -> None:
    return None
