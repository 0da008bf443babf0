"""Cost and variance by direct integration of the path: slow, plain, and nothing shared."""

from __future__ import annotations

from collections.abc import Callable, Iterator
from itertools import pairwise

import numpy as np
from scipy.integrate import quad, solve_ivp

from scheduler.model.ragged import Array
from scheduler.problem import Orders

Path = Callable[[float], float]


def integrate(f: Path, edges: list[float]) -> float:
    """Integral of f over each piece between edges, by s with u = a + (b - a) s^2."""
    total = 0.0
    for a, b in pairwise(edges):
        size = max(abs(f(a)), abs(f(0.5 * (a + b))), abs(f(b)))

        def inner(s: float, a: float = a, b: float = b) -> float:
            return f(a + (b - a) * s * s) * 2.0 * s

        total += (b - a) * quad(inner, 0.0, 1.0, epsabs=1e-9 * size, epsrel=1e-9, limit=200)[0]
    return total


def evolution(z: float, theta: float, q: float) -> Path:
    """Z(u) from z under an evenly spread slice q."""
    if theta == 0.0:
        return lambda u: z + q * u
    return lambda u: q / theta + (z - q / theta) * float(np.exp(-theta * u))


def paths(orders: Orders, shares: Array) -> Iterator[tuple[int, Path, list[float]]]:
    """Stage, Z(u) inside it, and edges at its sign change and its relaxation scales."""
    z = float(orders.initial[0])
    for t, (theta, q) in enumerate(zip(orders.stages.theta, shares, strict=True)):
        path = evolution(z, theta, q)
        edges = {0.0, 1.0, *(c / theta for c in (0.1, 1.0, 4.0, 12.0, 40.0) if c < theta)}
        if z < 0.0 < path(1.0):
            edges.add(-z / q if theta == 0.0 else float(np.log1p(-z * theta / q)) / theta)
        yield t, path, sorted(edges)
        z = path(1.0)


def displaced(orders: Orders, z: float) -> float:
    """k sigma_0 sgn(Z) (|Z|/ADV)^delta."""
    m = orders.market
    ground = m.vol[0] / np.sqrt(1.0 + 2.0 * m.level_rate[0])
    return float(m.coefficient[0] * ground * np.sign(z) * (abs(z) / m.adv[0]) ** m.exponent[0])


def stage_costs(orders: Orders, shares: Array) -> Array:
    """p [int D(Z) dq - D(Z_0) q] of each stage of one order."""
    start = displaced(orders, float(orders.initial[0]))
    result = np.zeros(len(shares))
    for t, path, edges in paths(orders, shares):
        mean = integrate(lambda u, path=path: displaced(orders, path(u)), edges)
        result[t] = orders.market.price[0] * shares[t] * (mean - start)
    return result


def stage_variances(orders: Orders, shares: Array) -> Array:
    """p^2 h int x^2 (sigma^2 + phi sigma_0^2 |Z|/L) du of each stage of one order."""
    m, stages = orders.market, orders.stages
    ground = m.vol[0] ** 2 / (1.0 + 2.0 * m.level_rate[0])
    result, left = np.empty(len(shares)), float(orders.quantity[0])
    for t, path, edges in paths(orders, shares):
        fed = m.feedback[0] * ground / (m.relaxation[0] * m.adv[0]) * stages.open[t]

        def rate(u: float, x: float = left, q: float = shares[t], fed: float = fed) -> float:
            return (x - q * u) ** 2 * (m.vol[0] ** 2 + fed * abs(path(u)))  # noqa: B023

        result[t] = m.price[0] ** 2 * stages.variance[t] * integrate(rate, edges)
        left -= shares[t]
    return result


def cost_by_differential_equation(orders: Orders, shares: Array) -> float:
    """Total cost from dZ = dq - Z dV/L and dC = p (D(Z) - D(Z_0)) dq, integrated in time."""
    price, start = orders.market.price[0], displaced(orders, float(orders.initial[0]))
    state = [float(orders.initial[0]), 0.0]
    for theta, q in zip(orders.stages.theta, shares, strict=True):

        def slope(_: float, s: Array, theta: float = theta, q: float = q) -> list[float]:
            return [q - theta * s[0], price * q * (displaced(orders, s[0]) - start)]

        path = solve_ivp(slope, (0.0, 1.0), state, method="LSODA", rtol=1e-10, atol=1e-8)
        state = list(path.y[:, -1])
    return float(state[1])
