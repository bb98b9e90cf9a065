#!/usr/bin/env python3
"""The water account of seattle-weather.csv, independent of the Go program.

    python3 seattle.py

Reads date, precipitation, temp_max and temp_min, and writes beside itself

  seattle-unlimited.csv  a store that is never short, no stress
  seattle-500.csv        a store of 500 mm, stress from half of it on

both with coefficient 1, no canopy store, and a full store at the start. The
columns are day, reference evapotranspiration, actual evapotranspiration,
overflow and deficit at the end of the day, all mm, in full digits.

Formulas: Hargreaves and Samani as FAO-56 (Allen et al. 1998) equation 52,
extraterrestrial radiation equations 21 and 23 to 25, stress equation 84; the
deficit's recursion Wang-Erlandsson et al. 2016.
"""
import csv
import datetime
import pathlib

from math import acos, cos, pi, sin, sqrt, tan

HERE = pathlib.Path(__file__).resolve().parent
LATITUDE = 47.45  # degrees north, Seattle-Tacoma airport

# The yearly maxima this weather must give without a limit, known beforehand
# from another computation.
EXPECTED = {
    2012: (443.325, "2012-10-11"),
    2013: (432.222, "2013-09-04"),
    2014: (475.259, "2014-09-22"),
    2015: (562.667, "2015-10-06"),
}


def radiation(day):
    """Extraterrestrial radiation in MJ a square metre and day."""
    j = day.timetuple().tm_yday
    phi = LATITUDE * pi / 180
    distance = 1 + 0.033 * cos(2 * pi * j / 365)
    delta = 0.409 * sin(2 * pi * j / 365 - 1.39)
    sunset = acos(-tan(phi) * tan(delta))
    return (24 * 60 / pi * 0.0820 * distance
            * (sunset * sin(phi) * sin(delta) + cos(phi) * cos(delta) * sin(sunset)))


def hargreaves(day, low, high):
    """Reference evapotranspiration in mm, never below 0."""
    water = 0.408 * radiation(day)  # mm that this radiation could evaporate
    return max(0.0, 0.0023 * ((low + high) / 2 + 17.8) * sqrt(high - low) * water)


def account(weather, capacity=None, p=0.5):
    """Yields (day, reference, actual, overflow, deficit) from a full store."""
    deficit = 0.0
    for day, rain, low, high in weather:
        reference = hargreaves(day, low, high)
        actual = reference
        if capacity is not None:
            full = 1 - deficit / capacity
            actual *= min(1.0, max(0.0, full / (1 - p)))
        balance = deficit + actual - rain
        if capacity is not None and balance > capacity:
            actual -= balance - capacity
            balance = capacity
        overflow = -balance if balance < 0 else 0.0
        deficit = balance if balance > 0 else 0.0
        yield day, reference, actual, overflow, deficit


def write(name, rows):
    with open(HERE / name, "w", newline="", encoding="utf-8") as file:
        out = csv.writer(file, lineterminator="\n")
        out.writerow(["day", "reference_et_mm", "actual_et_mm", "overflow_mm", "deficit_mm"])
        for day, *numbers in rows:
            out.writerow([day.isoformat(), *map(repr, numbers)])


def main():
    with open(HERE / "seattle-weather.csv", newline="", encoding="utf-8") as file:
        weather = [(datetime.date.fromisoformat(row["date"]), float(row["precipitation"]),
                    float(row["temp_min"]), float(row["temp_max"])) for row in csv.DictReader(file)]
    unlimited = list(account(weather))
    for year, (expected, on) in EXPECTED.items():
        day, *_, deficit = max((row for row in unlimited if row[0].year == year), key=lambda row: row[-1])
        print(f"{year}: largest deficit {deficit:.3f} mm on {day}")
        if abs(deficit - expected) > 0.0005 or day.isoformat() != on:
            raise SystemExit(f"{year}: expected {expected} mm on {on}")
    write("seattle-unlimited.csv", unlimited)
    write("seattle-500.csv", account(weather, capacity=500.0))


if __name__ == "__main__":
    main()
