"""Make the tables of an invented transition: 400 names in two currencies, 12 factors.

    python examples/transition/make.py

Everything is drawn from a fixed seed; symbols, prices and exposures are invented. Run it again and
the same files come out.
"""

from __future__ import annotations

import csv
from collections.abc import Iterable, Sequence
from pathlib import Path

import numpy as np

HERE = Path(__file__).parent
NAMES, SEED = 400, 20260305
FACTORS = ("market", "size", "value", "carry", *(f"industry-{k}" for k in range(1, 9)))
START = ("Ald", "Bar", "Cor", "Dun", "Elm", "Fen", "Gar", "Hol", "Kel", "Lin", "Mor", "Nor")
END = ("beck", "bury", "combe", "dale", "field", "garth", "ham", "holt", "ley", "mere", "thorpe")


def symbols(count: int) -> list[str]:
    pairs = [f"{start}{end}".upper() for end in END for start in START]
    return [f"{pairs[k % len(pairs)]}{k // len(pairs) or ''}" for k in range(count)]


def write(name: str, header: Sequence[str], rows: Iterable[Sequence[object]]) -> None:
    with (HERE / name).open("w", newline="") as file:
        writer = csv.writer(file, lineterminator="\n")
        writer.writerow(header)
        writer.writerows(rows)


def main() -> None:
    rng = np.random.default_rng(SEED)
    names = symbols(NAMES)
    abroad = np.arange(NAMES) % 3 == 2  # a third trades in London, in pounds
    price = np.round(10.0 ** rng.uniform(0.8, 2.3, NAMES), 2)
    adv = np.round(10.0 ** rng.uniform(5.3, 7.0, NAMES), -2)
    exposures = np.zeros((NAMES, len(FACTORS)))
    exposures[:, 0] = rng.normal(1.0, 0.2, NAMES)
    exposures[:, 1:4] = rng.normal(0.0, 1.0, (NAMES, 3))
    exposures[np.arange(NAMES), 4 + rng.integers(0, 8, NAMES)] = 1.0
    deviation = np.array([0.009, 0.003, 0.0025, 0.002, *[0.006] * 8])
    correlation = np.eye(len(FACTORS))
    correlation[0, 1] = correlation[1, 0] = -0.2
    covariance = correlation * np.outer(deviation, deviation)
    factor = np.einsum("nk,kl,nl->n", exposures, covariance, exposures)
    vol = np.round(np.sqrt(factor + rng.uniform(0.008, 0.02, NAMES) ** 2), 4)
    # sells and buys of nearly the same value
    value = rng.lognormal(12.6, 0.9, NAMES)
    side = rng.permutation(np.arange(NAMES) % 2 == 0)
    value[side] *= value[~side].sum() / value[side].sum() * 1.01
    fx = np.where(abroad, 1.25, 1.0)
    shares = np.maximum(np.round(np.minimum(value / (price * fx), 0.12 * adv), -1), 10.0)
    spread = np.round(rng.uniform(2.0, 12.0, NAMES), 1)
    write(
        "orders.csv",
        ("order_id", "symbol", "side", "quantity", "max_participation"),
        (
            (f"T{k + 1:03}", names[k], "buy" if side[k] else "sell", int(shares[k]), "0.15")
            for k in range(NAMES)
        ),
    )
    write(
        "market.csv",
        (
            "symbol",
            "price",
            "adv",
            "daily_vol",
            "currency",
            "fx",
            "calendar",
            "spread_bps",
            "group",
        ),
        (
            (
                names[k],
                price[k],
                int(adv[k]),
                vol[k],
                "GBP" if abroad[k] else "USD",
                fx[k],
                "XLON" if abroad[k] else "XNYS",
                spread[k],
                "abroad" if abroad[k] else "home",
            )
            for k in range(NAMES)
        ),
    )
    write(
        "exposures.csv",
        ("symbol", *FACTORS),
        ((names[k], *np.round(exposures[k], 3)) for k in range(NAMES)),
    )
    write(
        "factor_covariance.csv",
        ("factor", *FACTORS),
        ((name, *(f"{v:.6g}" for v in row)) for name, row in zip(FACTORS, covariance, strict=True)),
    )
    write(
        "corridors.csv",
        ("kind", "lower", "upper", "from", "to"),
        (("cash", "-4%", "4%", "", ""), ("factor:market", "-4%", "4%", "", "")),
    )


if __name__ == "__main__":
    main()
