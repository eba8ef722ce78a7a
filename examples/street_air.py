"""What do wind, temperature, the hour and the weekday add to nitrogen dioxide in the street?

A whole analysis in Python of the invented readings that ship with addmodel (see
make_street_air.py): fit, look, check against a simpler model, predict, and write what goes into a
report. Run: python examples/street_air.py [FOLDER]
"""

import sys
from pathlib import Path

import numpy as np
import pandas as pd

import addmodel as am

READINGS = Path(am.__file__).parent / "demo" / "street_air.csv"


def main(folder: Path) -> None:
    """Write tables and figures into the folder, and say the findings in words."""
    folder.mkdir(parents=True, exist_ok=True)
    readings = pd.read_csv(READINGS, parse_dates=["time"])

    fit = am.fit(
        "no2 ~ curve(wind) + curve(temperature) + curve(time)"
        " + cycle(time, period='day') + cycle(time, period='week') + station",
        readings,
    )
    print(fit.summary())

    # The same without bends: how much do the curves take away beyond straight lines?
    straight = am.fit("no2 ~ wind + temperature + time + station", readings)
    print(
        f"\nStraight lines take away {100 * straight.deviance_reduction:.0f} % of the null "
        f"deviance, the curves {100 * fit.deviance_reduction:.0f} %."
    )

    # Calm against windy, at the typical value of everything else.
    calm, windy = (fit.effect("curve(wind)", at=[speed]).table.iloc[0] for speed in (0.5, 6.0))
    print(
        f"Air at 0.5 m/s holds {calm.effect - windy.effect:.1f} µg/m³ more than at 6 m/s, "
        "the rest being equal."
    )

    # Two hours of one winter's day at the ring road, mean and single reading.
    hours = pd.DataFrame(
        {
            "time": pd.to_datetime(["2022-01-18 08:00", "2022-01-18 13:00"]),
            "station": "ring road",
            "temperature": 2.0,
            "wind": 1.5,
        }
    )
    mean = fit.predict(hours, interval=0.95)
    single = fit.predict(hours, interval=0.95, new_observation=True)
    assert isinstance(mean, pd.DataFrame)
    assert isinstance(single, pd.DataFrame)
    for i, name in enumerate(["at 8:00", "at 13:00"]):
        print(
            f"Expected {name}: {mean.prediction[i]:.0f} µg/m³ ({mean.lower[i]:.0f} to "
            f"{mean.upper[i]:.0f}); one reading: {single.lower[i]:.0f} to {single.upper[i]:.0f}."
        )

    # An interval for the difference of the two, from posterior draws: they share their errors.
    columns = fit.columns(hours).to_numpy()
    difference = fit.draws(4000) @ (columns[0] - columns[1])
    low, high = np.quantile(difference, [0.025, 0.975])
    print(f"The morning's excess over 13:00: {low:.1f} to {high:.1f} µg/m³.")

    fit.plot().savefig(folder / "effects.png", dpi=200)
    fit.components.to_csv(folder / "components.csv")
    fit.effect("curve(wind)").table.to_csv(folder / "wind.csv", index=False)
    fit.save(folder / "street_air.addmodel")
    print(
        f"\nWritten to {folder}. Associations in invented data: no cause is shown, and nothing is "
        "said outside the range of the readings."
    )


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else Path("street-air-results"))
