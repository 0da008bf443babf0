"""Paths of a rehearsal a second, beside a straightforward loop over paths and buckets."""

from __future__ import annotations

import time

import numpy as np

from benchmarks.problems import random_orders
from benchmarks.timing import milliseconds, table
from scheduler.figures import Charges, Figures
from scheduler.model.ragged import Array
from scheduler.paths import Noise, play
from scheduler.solve.schedule import schedule

_BUCKETS, _NODES = 78, 8
_NOISE = Noise(session=0.3, bucket=0.4)


def run() -> None:
    orders = random_orders(1, _BUCKETS, seed=1)
    nothing = np.zeros(_BUCKETS)
    figures = Figures(orders, Charges(nothing, nothing), schedule(orders).shares)
    clock = time.perf_counter()
    loop = [_one(figures, seed) for seed in range(200)]
    each = (time.perf_counter() - clock) / len(loop)
    rows = []
    for paths in (10_000, 100_000):
        clock = time.perf_counter()
        played = play(figures, 0, _NOISE, paths, np.random.default_rng(1))
        seconds = time.perf_counter() - clock
        rows.append(
            (
                f"{paths:,} x {_BUCKETS}",
                milliseconds(seconds),
                f"{paths / seconds:,.0f}",
                milliseconds(each),
                f"{each * paths / seconds:.0f}",
                f"{played.expected.mean() / np.mean(loop) - 1.0:+.1%}",
            )
        )
    header = (
        "paths",
        "time",
        "paths a second",
        "a path by the loop",
        "ratio",
        "mean, over the loop's",
    )
    print(table("Rehearsals, volume at random:", header, rows))


def _one(figures: Figures, seed: int) -> float:
    """The expected cost of one path, bucket by bucket and node by node."""
    orders, rng = figures.orders, np.random.default_rng(seed)
    market, stages = orders.market, orders.stages
    node, weight = np.polynomial.legendre.leggauss(_NODES)
    u, w = 0.5 * (node + 1.0), 0.5 * weight
    price, power = float(market.price[0]), float(market.exponent[0])
    scale = price * float(market.coefficient[0] * market.ground_vol[0])
    day = np.exp(_NOISE.session * rng.standard_normal() - 0.5 * _NOISE.session**2)
    z, waiting, cost = float(orders.initial[0]), 0.0, 0.0
    for t in range(_BUCKETS):
        factor = day * np.exp(_NOISE.bucket * rng.standard_normal() - 0.5 * _NOISE.bucket**2)
        theta = float(stages.theta[t]) * factor
        wanted = float(figures.shares[t]) + waiting
        q = min(wanted, float(orders.cap[t]) * factor)
        waiting = wanted - q
        path = _within(z, theta, q, u)
        moved = scale * np.sign(path) * (np.abs(path) / float(market.adv[0])) ** power
        cost += q * float(w @ moved)
        z = float(_within(z, theta, q, np.ones(1))[0])
    return cost


def _within(z: float, theta: float, q: float, u: Array) -> Array:
    result: Array = q / theta + (z - q / theta) * np.exp(-theta * u)
    return result
