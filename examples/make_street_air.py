"""Invents the demo's data: nitrogen dioxide at four stations of a town that does not exist.

Every number is made up here, from a fixed seed; the curves below are what a fit should find again.
Run from the top folder: python examples/make_street_air.py
"""

from pathlib import Path

import numpy as np
import pandas as pd

TARGET = Path(__file__).parents[1] / "addmodel" / "demo" / "street_air.csv"
STATIONS = {"canal": -6.0, "market": 3.0, "old mill": -3.5, "ring road": 11.0}


def invent() -> pd.DataFrame:
    """2,400 readings over two years."""
    rng = np.random.default_rng(20_240_607)
    n = 2_400
    hours = np.sort(rng.choice(2 * 365 * 24, n, replace=False))
    time = pd.Timestamp("2021-01-01") + pd.to_timedelta(hours, unit="h")
    year = 2 * np.pi * np.asarray(time.day_of_year) / 365.25
    hour = np.asarray(time.hour)
    temperature = 11 - 8 * np.cos(year - 0.4) + 3 * np.sin(2 * np.pi * (hour - 9) / 24)
    temperature += 3.5 * rng.standard_normal(n)
    wind = rng.gamma(2.2, 1.6, n)
    station = rng.choice(list(STATIONS), n, p=[0.2, 0.3, 0.15, 0.35])
    rush = 7 * np.exp(-((hour - 8) ** 2) / 4) + 8 * np.exp(-((hour - 18) ** 2) / 7)
    weekday = np.where(np.asarray(time.day_of_week) < 5, 1.0, 0.35)
    trend = -4 / (1 + np.exp(-(hours / 24 - 420) / 40))
    no2 = (
        24
        + 16 * np.exp(-wind / 2.5)
        + 0.012 * (temperature - 16) ** 2
        + rush * weekday
        + trend
        + np.array([STATIONS[s] for s in station])
        + 5 * rng.standard_normal(n)
    )
    table = pd.DataFrame(
        {
            "time": time.strftime("%Y-%m-%d %H:%M"),
            "station": station,
            "temperature": temperature.round(1),
            "wind": wind.round(2),
            "no2": np.maximum(no2, 0.5).round(1),
        }
    )
    table.loc[rng.choice(n, 23, replace=False), "wind"] = np.nan  # the instrument froze
    return table


if __name__ == "__main__":
    invent().to_csv(TARGET, index=False)
    print(f"wrote {TARGET}")
