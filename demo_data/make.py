"""Makes the eight data sets of Halvendale, an invented valley. Run: python demo_data/make.py [FOLDER]

The random numbers come from numpy's RandomState, whose streams are frozen for good, so that every
version of numpy gives the same bytes. Effects of the few units at the top of a hierarchy are scaled
to have exactly the stated standard deviation: with twelve clinics, chance alone would often give a
file that does not show what it is meant to show.
"""

from __future__ import annotations

import sys
from pathlib import Path

import numpy as np
import pandas as pd

TRUTH = {
    "trial": {
        "arm": -3.0,
        "baseline": 0.55,
        "age": 0.12,
        "residual sd": 10.0,
        "icc": 0.15,
    },
    "lambs": {
        "twin": -0.8,
        "ram": 0.5,
        "flock sd": 0.5,
        "lamb sd": 0.7,
        "noise sd": 0.5,
        "grown weight": 40.0,
        "rate per day": 0.011,
    },
    "stream": {
        "strip": -0.4,
        "rain": 0.03,
        "year": 0.15,
        "winter": 1.2,
        "spring": 0.4,
        "rho": 0.7,
        "innovation sd": 0.45,
    },
    "wells": {
        "road_km": -0.35,
        "depth_m": -0.02,
        "wet": 0.5,
        "field sd": 1.2,
        "range km": 4.0,
        "site sd": 0.5,
        "noise sd": 0.6,
    },
    "transects": {
        "grazed": -0.35,
        "wind": -0.08,
        "best elevation": 420.0,
        "half width": 286.0,
        "transect sd": 0.2,
        "noise sd": 0.35,
    },
    "visits": {
        "start": 0.5,
        "week": -0.06,
        "week with new care": -0.05,
        "patient sd": 0.7,
        "process sd": 1.0,
        "process weeks": 6.0,
        "noise sd": 0.5,
    },
    "plots": {
        "brim": 0.1,
        "cote": 0.25,
        "dale": 0.0,
        "esk": -0.15,
        "field sd": 0.45,
        "range m": 9.0,
        "noise sd": 0.25,
    },
    "survey": {
        "spending": 0.12,
        "school": 0.05,
        "age": 0.004,
        "land sd": 0.45,
        "residual sd": 1.2,
    },
}


def trial() -> pd.DataFrame:
    """Blood pressure after twelve weeks; home visits assigned by clinic; clinics of 9 to 71 people."""
    rng, true = np.random.RandomState(4107), TRUTH["trial"]
    names = ["Alder", "Birch", "Cedar", "Dogwood", "Elder", "Fir", "Gorse", "Hazel", "Ivy", "Juniper"]
    names += ["Larch", "Maple"]
    sizes = np.array([9, 71, 44, 22, 38, 15, 62, 29, 12, 51, 33, 26])
    visits = np.isin(names, ["Birch", "Dogwood", "Fir", "Ivy", "Juniper", "Larch"])
    clinic = np.repeat(np.arange(12), sizes)
    spread = true["residual sd"] * np.sqrt(true["icc"] / (1 - true["icc"]))
    effect = spread * _scaled(rng.normal(size=12), visits)
    n = sizes.sum()
    age = np.clip(rng.normal(58, 11, n), 24, 88).round()
    baseline = np.round(150 + 0.2 * (age - 58) + rng.normal(0, 12, n))
    pressure = (
        140
        + true["arm"] * visits[clinic]
        + true["baseline"] * (baseline - 150)
        + true["age"] * (age - 58)
        + effect[clinic]
        + rng.normal(0, true["residual sd"], n)
    )
    return pd.DataFrame(
        {
            "person": [f"P{i:03d}" for i in rng.permutation(n) + 1],
            "clinic": np.array(names)[clinic],
            "arm": np.where(visits[clinic], "visits", "usual"),
            "age": age.astype(int),
            "baseline": baseline.astype(int),
            "pressure": _written(np.where(rng.random_sample(n) < 0.05, np.nan, pressure), 0),
        }
    )


def lambs() -> pd.DataFrame:
    """Weights of lambs in ten flocks, numbered afresh in each flock; growth slows with age."""
    rng, true = np.random.RandomState(2210), TRUTH["lambs"]
    flocks = ["Ash", "Beck", "Crag", "Dell", "Edge", "Fell", "Glen", "Hurst", "Ings", "Knoll"]
    counts = np.array([6, 9, 12, 7, 10, 8, 5, 11, 9, 8])
    flock = np.repeat(np.arange(10), counts)
    number = np.concatenate([np.arange(1, c + 1) for c in counts])
    total = len(flock)
    twin, ram = rng.random_sample(total) < 0.55, rng.random_sample(total) < 0.5
    own = true["flock sd"] * _scaled(rng.normal(size=10))[flock] + true["lamb sd"] * rng.normal(size=total)
    rows = []
    for day in (0, 14, 28, 42, 56, 70):
        seen = rng.random_sample(total) < (1.0 if day == 0 else 0.88)
        growth = 5.0 + true["grown weight"] * (1 - np.exp(-true["rate per day"] * day))
        fixed = growth + true["twin"] * twin + true["ram"] * ram
        weight = fixed + own + true["noise sd"] * rng.normal(size=total)
        rows.append(
            pd.DataFrame(
                {
                    "flock": np.array(flocks)[flock],
                    "lamb": number,
                    "day": day,
                    "birth": np.where(twin, "twin", "single"),
                    "sex": np.where(ram, "ram", "ewe"),
                    "weight": _written(weight, 1),
                }
            )[seen]
        )
    return pd.concat(rows).sort_values(["flock", "lamb", "day"], ignore_index=True)


def stream() -> pd.DataFrame:
    """Nitrate in a stream by day over two years, with readings missing; alders planted half-way."""
    rng, true = np.random.RandomState(365), TRUTH["stream"]
    date = pd.date_range("2022-01-01", "2023-12-31", freq="D")
    n = len(date)
    turn = 2 * np.pi * (date.day_of_year.to_numpy() - 15) / 365.25
    winter, spring, year = np.cos(turn).round(3), np.sin(turn).round(3), (np.arange(n) / 365.25).round(4)
    strip = (date >= "2023-01-01").astype(int)
    wet = rng.random_sample(n) < 0.38 + 0.1 * winter
    rain = np.where(wet, rng.exponential(6.0, n), 0.0).round(1)
    error = np.empty(n)
    error[0] = true["innovation sd"] / np.sqrt(1 - true["rho"] ** 2) * rng.normal()
    shocks = true["innovation sd"] * rng.normal(size=n)
    for t in range(1, n):
        error[t] = true["rho"] * error[t - 1] + shocks[t]
    nitrate = (
        6.5
        + true["strip"] * strip
        + true["rain"] * rain
        + true["year"] * year
        + true["winter"] * winter
        + true["spring"] * spring
        + error
    )
    kept = rng.random_sample(n) > 0.03
    for start in (118, 301, 522):  # the gauge was out for repair
        kept[start : start + rng.randint(6, 15)] = False
    frame = pd.DataFrame(
        {
            "date": date.strftime("%Y-%m-%d"),
            "year": year,
            "winter": winter,
            "spring": spring,
            "rain": rain,
            "strip": strip,
            "nitrate": _written(nitrate, 2),
        }
    )
    return frame[kept].reset_index(drop=True)


def wells() -> pd.DataFrame:
    """Chloride in sixty wells on four rounds; an exponential field, well noise, row noise."""
    rng, true = np.random.RandomState(608), TRUTH["wells"]
    sites, hamlets = 60, 20
    at = np.repeat(
        np.column_stack([rng.random_sample(hamlets) * 36, rng.random_sample(hamlets) * 22]), 3, axis=0
    )
    place = np.clip(at + rng.normal(0, 1.3, (sites, 2)), 0, (36, 22)).round(2)
    east, north = place[rng.permutation(sites)].T
    apart = np.hypot(east[:, None] - east, north[:, None] - north)
    root = np.linalg.cholesky(np.exp(-apart / true["range km"]) + 1e-10 * np.eye(sites))
    road = np.abs(north - (8 + 0.15 * east + 2.5 * np.sin(east / 7))).round(2)
    depth = np.round(40 + 9 * (root @ rng.normal(size=sites)) + 4 * rng.normal(size=sites))
    level = (
        4.2
        + true["road_km"] * road
        + true["depth_m"] * depth
        + true["field sd"] * (root @ rng.normal(size=sites))
        + true["site sd"] * rng.normal(size=sites)
    )
    frames = []
    for number, wet in enumerate((0, 1, 0, 1), start=1):
        seen = rng.random_sample(sites) < 0.92
        value = level + true["wet"] * wet + true["noise sd"] * rng.normal(size=sites)
        frames.append(
            pd.DataFrame(
                {
                    "well": [f"W{i:02d}" for i in range(1, sites + 1)],
                    "round": number,
                    "east_km": east,
                    "north_km": north,
                    "road_km": road,
                    "depth_m": depth.astype(int),
                    "wet": wet,
                    "chloride": _written(value, 2),
                }
            )[seen]
        )
    return pd.concat(frames).sort_values(["well", "round"], ignore_index=True)


def transects() -> pd.DataFrame:
    """Birds on 38 transects walked three to nine times each; most birds live half-way up the fell."""
    rng, true = np.random.RandomState(3807), TRUTH["transects"]
    total = 38
    walks = rng.randint(3, 10, total)
    elevation = np.round(rng.uniform(120, 760, total), -1)
    grazed = rng.random_sample(total) < 0.5
    own = true["transect sd"] * _scaled(rng.normal(size=total))
    of = np.repeat(np.arange(total), walks)
    wind = rng.randint(0, 6, len(of))
    hump = -(((elevation - true["best elevation"]) / true["half width"]) ** 2)
    log_birds = (
        2.6
        + hump[of]
        + true["grazed"] * grazed[of]
        + true["wind"] * wind
        + own[of]
        + true["noise sd"] * rng.normal(size=len(of))
    )
    return pd.DataFrame(
        {
            "transect": [f"T{k + 1:02d}" for k in of],
            "walk": np.concatenate([np.arange(1, w + 1) for w in walks]),
            "elevation": elevation[of].astype(int),
            "grazed": np.where(grazed[of], "yes", "no"),
            "wind": wind,
            "log_birds": _written(log_birds, 2),
        }
    )


def visits() -> pd.DataFrame:
    """Pain of 60 patients at weeks of their own; some stop coming; a level and a slow process each."""
    rng, true = np.random.RandomState(1203), TRUTH["visits"]
    rows = []
    for k, new in enumerate(rng.permutation(np.repeat([0, 1], 30))):
        stay = int(np.clip(rng.geometric(0.11) + 2, 3, 12))
        week = np.unique(np.concatenate([[0.0], np.cumsum(rng.gamma(2.2, 1.3, stay - 1))]).round(1))
        start, own = np.round(rng.normal(6, 1.2), 1), true["patient sd"] * rng.normal()
        process = rng.normal()
        for w, gap in zip(week, np.diff(week, prepend=0.0), strict=True):
            keeps = np.exp(-gap / true["process weeks"])
            process = keeps * process + np.sqrt(1 - keeps**2) * rng.normal()
            pain = (
                5.8
                + true["start"] * (start - 6)
                + (true["week"] + true["week with new care"] * new) * w
                + own
                + true["process sd"] * process
                + true["noise sd"] * rng.normal()
            )
            rows.append((f"H{k + 1:02d}", "new" if new else "as before", start, w, pain))
    frame = pd.DataFrame(rows, columns=["patient", "care", "start", "week", "pain"])
    return frame.assign(pain=_written(frame["pain"].to_numpy(), 1))


def plots() -> pd.DataFrame:
    """Barley on a field of 12 by 20 plots in four blocks; soil differs smoothly over the field."""
    rng, true = np.random.RandomState(1220), TRUTH["plots"]
    row, column = np.divmod(np.arange(240), 20)
    east, north, block = 3 * column, 6 * row, column // 5
    variety = np.empty(240, dtype=int)
    for b in range(4):
        variety[block == b] = rng.permutation(np.tile(np.arange(5), 12))
    apart = np.hypot(east[:, None] - east, north[:, None] - north)
    root = np.linalg.cholesky(np.exp(-apart / true["range m"]) + 1e-10 * np.eye(240))
    gain = np.array([0.0, true["brim"], true["cote"], true["dale"], true["esk"]])
    tonnes = (
        5.2
        + gain[variety]
        + true["field sd"] * (root @ rng.normal(size=240))
        + true["noise sd"] * rng.normal(size=240)
    )
    return pd.DataFrame(
        {
            "plot": np.arange(1, 241),
            "block": np.array(["I", "II", "III", "IV"])[block],
            "east_m": east,
            "north_m": north,
            "variety": np.array(["Amber", "Brim", "Cote", "Dale", "Esk"])[variety],
            "tonnes": _written(tonnes, 2),
        }
    )


def survey() -> pd.DataFrame:
    """Trust of people in 24 lands around the valley; what a land spends is one number for all of them."""
    rng, true = np.random.RandomState(2440), TRUTH["survey"]
    lands = 24
    size = rng.randint(25, 90, lands)
    spending = np.round(rng.gamma(6, 0.9, lands), 1)
    own = true["land sd"] * _scaled(rng.normal(size=lands))
    of = np.repeat(np.arange(lands), size)
    age = rng.randint(18, 86, len(of))
    school = np.clip(np.round(rng.normal(11 + 0.2 * spending[of], 2.5)), 6, 20).astype(int)
    trust = (
        3.2
        + true["spending"] * spending[of]
        + true["school"] * (school - 11)
        + true["age"] * (age - 50)
        + own[of]
        + true["residual sd"] * rng.normal(size=len(of))
    )
    return pd.DataFrame(
        {
            "land": [f"Land {chr(ord('A') + k)}" for k in of],
            "spending": spending[of],
            "age": age,
            "school": school,
            "trust": _written(trust, 1),
        }
    )


def _scaled(draws: np.ndarray, halves: np.ndarray | None = None) -> np.ndarray:
    """Draws with mean 0 (in each half) and standard deviation exactly 1."""
    out = draws.copy()
    for part in (halves, ~halves) if halves is not None else (np.ones(len(draws), dtype=bool),):
        out[part] -= out[part].mean()
    return out / np.sqrt(np.sum(out**2) / (len(draws) - (2 if halves is not None else 1)))


def _written(values: np.ndarray, digits: int) -> list[str]:
    """Decimals as they stand in the file; an empty field where the value is missing."""
    return ["" if np.isnan(v) else f"{v:.{digits}f}" for v in values]


MAKERS = {
    "trial": trial,
    "lambs": lambs,
    "stream": stream,
    "wells": wells,
    "transects": transects,
    "visits": visits,
    "plots": plots,
    "survey": survey,
}


def main(folder: Path) -> None:
    for name, make in MAKERS.items():
        (folder / f"{name}.csv").write_bytes(make().to_csv(index=False, lineterminator="\n").encode())


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent)
