"""The hours of the year 2027 in `fennholm`: weather, and what follows from it. Seeded, all invented.

Public names: `profiles`.

One wind index for the region, in standard deviations, drives everything: its first week is told by
`STORY`, the rest is chance. Fronts come from the west, so that each site meets them at its own hour.
"""

from collections.abc import Mapping

import numpy as np
import pandas as pd
from numpy.typing import NDArray

__all__ = ["profiles"]

Floats = NDArray[np.float64]
Sites = Mapping[str, tuple[float, float]]
"""Bus → latitude and longitude, degrees."""

SEED = 20270213
ZONE = "Europe/Dublin"

STORY = (
    (0, 0.2), (20, 0.0), (34, -1.3), (70, -1.4), (88, -0.6), (98, 0.6), (105, 1.2), (118, 1.3),
    (127, 0.9), (132, 1.2), (134, 2.6), (136, 3.7), (138, 3.4), (140, 1.8), (146, 1.5), (151, 0.9),
    (154, -0.3), (157, -1.1), (170, -1.6), (196, -0.5),
)  # fmt: skip
"""Hours since 1 January and wind index: breeze, cold calm from Saturday, storm from Tuesday with a
gale on Wednesday evening, calm again on Thursday."""
STORY_ENDS = STORY[-1][0]

HOLIDAYS = (
    "01-01", "02-08", "03-29", "05-10", "06-21", "09-06", "11-01", "12-24", "12-25", "12-31",
)  # fmt: skip
"""Invented, month and day."""
REST = {"Saturday": 0.75, "Sunday": 1.0}
"""How far a day is from a weekday, with 1 for holidays as well."""
LAMPS = (16, 17, 18, 19, 20)
"""Hours of a winter evening that are dark and awake."""

SHAPES: Mapping[str, tuple[str, str]] = {
    "homes": (
        "58 54 52 51 52 58 72 84 82 77 75 75 77 75 74 76 82 93 100 99 94 86 75 65",
        "62 57 54 52 52 55 61 70 79 84 86 87 88 85 82 82 86 94 98 96 91 85 77 68",
    ),
    "city": (
        "57 54 52 52 54 61 75 88 94 95 96 96 96 94 93 94 96 100 99 93 86 79 70 62",
        "56 53 51 50 50 53 58 65 72 77 80 81 81 79 77 77 80 87 89 85 80 74 67 60",
    ),
    "town": (
        "55 52 51 51 53 60 74 87 91 91 91 91 91 89 88 89 92 99 100 95 87 79 68 60",
        "56 53 51 50 50 54 60 67 75 80 82 83 83 80 78 78 82 90 93 90 84 77 69 61",
    ),
    "works": (
        "80 79 79 80 82 88 95 98 100 100 100 99 98 99 99 98 96 94 92 91 90 88 85 82",
        "72 71 71 71 71 72 73 74 75 75 75 75 74 74 74 74 74 74 74 74 73 73 73 72",
    ),
}
"""Load in per cent of the peak by hour: weekdays, then Sundays."""

WIND_SITES: Mapping[str, tuple[str, float]] = {
    "wind skarrow": ("Skarrowby", 10.4),
    "wind ulver": ("Ulverane", 10.0),
    "wind thornhesk": ("Thornhesk-220", 9.3),
    "wind grimmel": ("Grimmelsay", 10.2),
    "wind dunmarrel": ("Dunmarrel", 8.8),
    "wind westerkell": ("Westerkell", 9.9),
    "wind tarrow": ("Tarrowmouth", 9.4),
    "wind oskerra": ("Oskerra", 10.0),
}
"""Profile → bus and Weibull scale of the wind at hub height, m/s."""
SUN_SITES: Mapping[str, str] = {
    "sun soltrane": "Soltrane",
    "sun wendlemere": "Wendlemere",
    "sun fallowmarch": "Fallowmarch",
}
COOLING: Mapping[str, str] = {"rating east": "wind dunmarrel", "rating west": "wind westerkell"}
"""Rating profile → the wind that cools the line."""


def periods() -> pd.DatetimeIndex:
    """Return the hours of the year, both clock changes included."""
    return pd.date_range("2027-01-01", "2028-01-01", freq="h", tz=ZONE, inclusive="left")


def season(time: pd.DatetimeIndex, peak_day: int) -> Floats:
    """Return a yearly wave, 1 on the peak day and −1 half a year from it."""
    return np.asarray(np.cos(2 * np.pi * (time.day_of_year.to_numpy() - peak_day) / 365))


def winter(time: pd.DatetimeIndex) -> Floats:
    """Return 1 in the middle of January, −1 in the middle of July."""
    return season(time, 17)


def wander(random: np.random.Generator, count: int, hours: float) -> Floats:
    """Return an Ornstein-Uhlenbeck path of mean 0 and σ 1 that forgets within `hours`."""
    keep = np.exp(-1 / hours)
    steps = random.standard_normal(count) * np.sqrt(1 - keep**2)
    path = np.empty(count)
    value = random.standard_normal()
    for hour, step in enumerate(steps):
        value = keep * value + step
        path[hour] = value
    return path


# Wind


def fronts(random: np.random.Generator, time: pd.DatetimeIndex) -> Floats:
    """Return passing storms: more often and stronger in winter, sharp rise, slow fall."""
    born = random.random(len(time)) < 0.0045 + 0.0025 * winter(time)
    strength = born * random.gamma(5, 0.3, len(time)) * (1 + 0.25 * winter(time))
    hours = np.arange(60)
    pulse = np.minimum(hours / 9, 1) * np.exp(-np.maximum(hours - 9, 0) / 12)
    return np.convolve(strength, pulse)[: len(time)]


def wind_index(random: np.random.Generator, time: pd.DatetimeIndex) -> Floats:
    """Return the region's wind in standard deviations: the story first, then chance."""
    hour = np.arange(len(time))
    slow, fast = wander(random, len(time), 90), wander(random, len(time), 22)
    index = 0.22 * winter(time) - 0.32 + 0.55 * slow + 0.62 * fast + fronts(random, time)
    knots, values = np.array(STORY, dtype=float).T
    told = np.interp(hour, knots, values) + 0.12 * fast
    trust = np.clip((STORY_ENDS - hour) / 30, 0, 1)
    return np.asarray(trust * told + (1 - trust) * index)


def at_site(index: Floats, longitude: float, local: Floats) -> Floats:
    """Return the index at a site: fronts come from the west at 30 km/h, and each site has its own air."""
    hour = np.arange(len(index), dtype=float)
    lag = (longitude + 17.8) * 69 / 30
    return np.asarray(0.95 * np.interp(hour - lag, hour, index) + 0.28 * local)


def wind_speed(index: Floats, scale: float) -> Floats:
    """Return a Weibull speed of shape 2.1 with the same rank, m/s; Φ by its tanh approximation."""
    rank = 0.5 * (1 + np.tanh(np.sqrt(2 / np.pi) * (index + 0.044715 * index**3)))
    return np.asarray(scale * (-np.log1p(-np.minimum(rank, 1 - 1e-9))) ** (1 / 2.1))


def wind_power(speed: Floats) -> Floats:
    """Return output of a plant per MW: cubic rise, rated at 13 m/s, cut-out spread over 24 to 29 m/s."""
    rising = np.clip((speed**3 - 3.2**3) / (13.0**3 - 3.2**3), 0, 1)
    running = np.clip((29 - speed) / 5, 0, 1)
    return np.asarray(0.96 * rising * running)


def wind_speeds(
    random: np.random.Generator, time: pd.DatetimeIndex, index: Floats, sites: Sites
) -> pd.DataFrame:
    """Return wind at every site, m/s."""
    return pd.DataFrame({
        name: wind_speed(at_site(index, sites[bus][1], wander(random, len(time), 7)), scale)
        for name, (bus, scale) in WIND_SITES.items()
    })  # fmt: skip


# Air, sun, rivers


def temperature(random: np.random.Generator, time: pd.DatetimeIndex, index: Floats) -> Floats:
    """Return °C: season, day, and calm winter air that is cold."""
    wave, hour = winter(time), time.hour.to_numpy()
    day = 2.2 * (1 - 0.4 * wave) * np.cos(2 * np.pi * (hour - 15) / 24)
    mild = 3.0 * np.clip(wave, 0, 1) * np.clip(index, -1.5, 1.2)
    chance = 2.2 * wander(random, len(time), 70)
    chance[:STORY_ENDS] *= 0.3
    return np.asarray(10.0 - 6.5 * wave + day + mild + chance)


def sun_height(time: pd.DatetimeIndex, latitude: float, longitude: float) -> tuple[Floats, Floats]:
    """Return sine of the sun's elevation and its cosine to panels tilted 30° south, mid-hour."""
    hour = time.tz_convert("UTC").hour.to_numpy() + 0.5
    declination = np.radians(-23.44) * season(time, -10)
    angle = np.radians(15 * (hour - 12) + longitude)
    elevation, tilted = (
        np.sin(north) * np.sin(declination) + np.cos(north) * np.cos(declination) * np.cos(angle)
        for north in (np.radians(latitude), np.radians(latitude - 30))
    )
    return np.clip(elevation, 0, 1), np.clip(tilted, 0, 1)


def sun_power(time: pd.DatetimeIndex, latitude: float, longitude: float, cloud: Floats) -> Floats:
    """Return output of a plant per MW: cloud, from 0 to 1, takes the beam and leaves diffuse light."""
    up, tilted = sun_height(time, latitude, longitude)
    air = np.where(up > 0, 0.72 ** (1 / np.maximum(up, 0.05) ** 0.7), 0.0)
    beam, diffuse = 1.25 * air * tilted, 0.16 * up
    return np.asarray(np.minimum((1 - cloud) * beam + (1 + 0.2 * cloud) * diffuse, 0.95))


def cloudiness(random: np.random.Generator, index: Floats) -> Floats:
    """Return cloud from 0 to 1: persistent, thicker in wind."""
    air = 1.3 * wander(random, len(index), 30) + 0.5 * wander(random, len(index), 4) + 0.6 * index
    return np.asarray(1 / (1 + np.exp(-1.4 * (air + 0.25))))


def sun(
    random: np.random.Generator, time: pd.DatetimeIndex, index: Floats, sites: Sites
) -> pd.DataFrame:
    """Return the solar profiles; neighbouring plants share most of their clouds."""
    shared = cloudiness(random, index)
    return pd.DataFrame({
        name: sun_power(time, *sites[bus], 0.7 * shared + 0.3 * cloudiness(random, index))
        for name, bus in SUN_SITES.items()
    })  # fmt: skip


def river(random: np.random.Generator, time: pd.DatetimeIndex, index: Floats) -> Floats:
    """Return flow per MW: rain of windy days runs off within a week, over a season's base."""
    rain = np.clip(index - 0.4, 0, None)
    runoff = np.convolve(rain, np.exp(-np.arange(24 * 30) / 150) / 150)[: len(time)]
    base = 0.36 + 0.16 * season(time, 55)
    return np.clip(base + 0.55 * runoff + 0.04 * wander(random, len(time), 48), 0.08, 1.0)


def line_rating(speed: Floats, degrees: Floats) -> Floats:
    """Return a multiplier of ratings: wind across the line and cold air cool it."""
    cooling = 0.88 + 0.022 * np.clip(speed - 4, 0, 14)
    return np.clip(cooling - 0.006 * (degrees - 10), 0.85, 1.18)


# Demand


def rest(time: pd.DatetimeIndex) -> Floats:
    """Return how far each hour's day is from a weekday, 0 to 1."""
    by_day = pd.Series(time.day_name()).map(REST).fillna(0.0).to_numpy(float)
    return np.where(time.strftime("%m-%d").isin(HOLIDAYS), 1.0, by_day)


def shape(name: str, time: pd.DatetimeIndex) -> Floats:
    """Return a load shape by hour and kind of day, 1 at most."""
    hour = time.hour.to_numpy()
    weekday, sunday = (np.array(text.split(), dtype=float)[hour] / 100 for text in SHAPES[name])
    return np.asarray((1 - rest(time)) * weekday + rest(time) * sunday)


def weather_factor(
    random: np.random.Generator, time: pd.DatetimeIndex, degrees: Floats, heating: float
) -> Floats:
    """Return a factor on a shape: heating below 15 °C, lamps in winter evenings, some chance."""
    lamps = 0.05 * np.isin(time.hour, LAMPS) * np.clip(winter(time), 0, 1)
    warmth = heating * np.clip(15 - degrees, 0, None) + 0.006 * np.clip(degrees - 20, 0, None)
    return np.asarray(1 + warmth + lamps + 0.012 * wander(random, len(time), 8))


def smelter(random: np.random.Generator, count: int) -> Floats:
    """Return a flat load that now and then takes a potline down for ten hours."""
    stops = random.random(count) < 1 / 900
    down = np.convolve(stops, np.ones(10))[:count] > 0
    return np.where(down, 0.62, 0.985 + 0.005 * wander(random, count, 12))


def loads(random: np.random.Generator, time: pd.DatetimeIndex, degrees: Floats) -> pd.DataFrame:
    """Return the load profiles, each 1 at its yearly peak."""
    north = degrees - 1.2 + 0.6 * wander(random, len(degrees), 24)
    shaped = {
        "homes north": ("homes", north, 0.030),
        "homes south": ("homes", degrees, 0.028),
        "city": ("city", degrees, 0.017),
        "town": ("town", degrees, 0.021),
        "works": ("works", degrees, 0.001),
    }
    frame = pd.DataFrame({
        name: shape(kind, time) * weather_factor(random, time, air, heating)
        for name, (kind, air, heating) in shaped.items()
    })  # fmt: skip
    frame["smelter"] = smelter(random, len(time))
    frame["halls"] = 0.955 + 0.004 * (degrees - 10) + 0.006 * wander(random, len(time), 20)
    return frame / frame.max()


def gas_price(random: np.random.Generator, time: pd.DatetimeIndex) -> Floats:
    """Return a multiplier that changes from day to day: dearer in winter, wandering."""
    day = time.day_of_year.to_numpy() - 1
    path = np.exp(0.06 * wander(random, 365, 20))
    return np.asarray((1 + 0.09 * winter(time)) * path[day])


# Files


def stamped(frame: pd.DataFrame, time: pd.DatetimeIndex) -> pd.DataFrame:
    """Round, and put local times in front without offset: a repeated hour comes twice."""
    return frame.round(4).set_index(time.strftime("%Y-%m-%dT%H:%M").rename("time")).reset_index()


def profiles(sites: Sites) -> dict[str, pd.DataFrame]:
    """Return the hourly tables, by path."""
    random, time = np.random.default_rng(SEED), periods()
    index = wind_index(random, time)
    degrees = temperature(random, time, index)
    speeds = wind_speeds(random, time, index, sites)
    cooled = {name: line_rating(speeds[wind].to_numpy(), degrees) for name, wind in COOLING.items()}
    rivers = {name: river(random, time, index) for name in ("river north", "river middle")}
    frames = {
        "hourly/wind.csv": speeds.apply(lambda speed: wind_power(speed.to_numpy())),
        "hourly/sun.csv": sun(random, time, index, sites),
        "hourly/river.csv": pd.DataFrame(rivers),
        "hourly/load.csv": loads(random, time, degrees),
        "hourly/gas.csv": pd.DataFrame({"gas price": gas_price(random, time)}),
        "hourly/rating.csv": pd.DataFrame(cooled),
    }
    return {path: stamped(frame, time) for path, frame in frames.items()}
