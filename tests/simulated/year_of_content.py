"""A year of vertical delay and slopes over a region, invented from published habits of the ionosphere, with its truth.

Not a line is shared with the outlook that is tested on it: no climatological model, no storm phases, no logarithmic
scatter laws of its learners.  Ingredients, in the order they are multiplied:
- a day: a rise from sunrise, a top two hours after local noon, an exponential fall, a floor at night
- a year: an annual and a semiannual wave (equinoxes highest, winter above summer)
- the Sun: a 27-day wave of 8 % whose size and phase wander slowly
- weather of the ionosphere: 15 % from day to day at noon (Forbes et al. 2000, JASTP 62: 15 to 35 % at most places),
  remembered for a day and a half (from memory), rotating slowly with the hour; 6 % from hour to hour; a little by place
- ten storms in 120 days: a day above the usual, one or two below it, in the afternoon strongest; some are all below
- noise of the measurement
Slopes follow the delay, wander by themselves, and grow in storms.  Storms are told beforehand as such outlooks are:
two of three, half a day early or late, of wrong size, with false alarms.
"""

from dataclasses import dataclass

import numpy as np

from skylag.ionosphere.outlook import Drivers, History, Limits
from skylag.tables import BROKEN, HOLDS, STRAINED, UNSEEN

# Half a cycle of 1575.42 MHz over 10 and over 30 km, on a line of sight at 30 degrees and at the zenith; slopes that an
# approach service takes for nominal, and that its station can announce.
USES = (
    Limits("short baselines", "slope", 5.5, 9.5),
    Limits("long baselines", "slope", 1.8, 3.2),
    Limits("approach", "slope", 4.0, 25.5),
)


@dataclass(frozen=True)
class Year:
    """The history as it is measured, what was known of Sun and field, and the days storms began on."""

    history: History
    drivers: Drivers
    storms: np.ndarray


def simulate(seed: int, days: int = 365, places: int = 6, storms: int = 10, first: str = "2031-01-01") -> Year:
    """A year from a seed, with so many storms in each 120 days, spread over them, five days apart at least."""
    rng = np.random.default_rng(seed)
    lats, lons = 50.0 + 4.0 * rng.random(places), 8.0 + 6.0 * rng.random(places)
    start = np.datetime64(first)
    day = np.arange(days)
    hour = np.arange(24) + 0.5
    local = (hour[:, None] + lons[None, :] / 15.0) % 24.0

    # The day.
    after = np.clip(local - 14.0, 0.0, None)
    before = np.clip(14.0 - local, 0.0, None)
    bump = np.where(local > 14.0, np.exp(-((after / 5.0) ** 1.4)), np.exp(-((before / 4.2) ** 2)))
    shape = 0.7 + 3.3 * bump * (1.0 - 0.02 * (lats - 52.0))[None, :]

    # The year and the Sun.
    of_year = ((start + day).astype("datetime64[D]") - (start + day).astype("datetime64[Y]")).astype(int)
    year = 1.0 + 0.12 * np.cos(2 * np.pi * (of_year - 15) / 365.25) + 0.16 * np.cos(4 * np.pi * (of_year - 82) / 365.25)
    size = 0.08 * np.exp(np.cumsum(rng.normal(0, 0.03, days)))
    turn = 2 * np.pi * day / 27.0 + np.cumsum(rng.normal(0, 0.06, days))
    sun = 1.0 + size * np.sin(turn)
    flux = 130.0 + 130.0 * 1.4 * size * np.sin(turn + 0.3) + rng.normal(0, 3.0, days)

    # Weather: two waves over the hours, each remembered from day to day.
    keep = np.exp(-1.0 / 1.5)
    level = np.zeros((days, 3))
    for number in range(1, days):
        level[number] = keep * level[number - 1] + np.sqrt(1 - keep**2) * rng.normal(0, 1, 3)
    waves = np.stack([np.ones(24), np.cos(2 * np.pi * hour / 24), np.sin(2 * np.pi * hour / 24)])
    weather = 0.12 * level[:, :1] @ waves[:1] + 0.09 * level[:, 1:] @ waves[1:]
    hourly = 0.06 * rng.normal(0, 1, (days, 24))
    local_weather = 0.03 * rng.normal(0, 1, (days, 24, places))

    # Storms.
    drawn = [np.sort(rng.choice(15, storms, replace=False)) * 8 + 120 * part for part in range(days // 120 + 1)]
    at = np.concatenate(drawn) + rng.integers(0, 4, storms * len(drawn))
    at = at[at < days]
    ap = np.round(rng.gamma(2.0, 3.5, (days, 8)))
    expected = np.full((days, 2, 8), np.nan)
    expected[:] = 8.0
    effect = np.zeros((days, 24))
    steep = np.zeros((days, 24))
    told_ap = np.full((days, 8), 8.0)
    for storm in at:
        begin = 8 * storm + int(rng.integers(0, 8))  # in three-hourly steps
        lasting = int(rng.integers(4, 12))
        top = rng.uniform(60, 240)
        rise = top * np.exp(-0.5 * ((np.arange(lasting) - lasting / 3) / (lasting / 2.2)) ** 2)
        last = min(begin + lasting, days * 8)
        flat = ap.reshape(-1)
        flat[begin:last] = np.maximum(flat[begin:last], rise[: last - begin])
        strength = np.sqrt(top / 100.0)
        first_hour = 3 * begin
        span = np.arange(first_hour, min(first_hour + 84, days * 24))
        late = span - first_hour
        afternoon = 0.4 + 0.6 * np.exp(-((((span % 24) - 14.0) / 5.0) ** 2))
        sign = -1.0 if rng.random() < 0.2 else 1.0
        up = 0.35 * sign * np.exp(-(((late - 9.0) / 8.0) ** 2))
        down = -0.28 * np.exp(-(((late - 34.0) / 16.0) ** 2))
        effect.reshape(-1)[span] += strength * afternoon * (up + down) * rng.uniform(0.6, 1.4)
        steep.reshape(-1)[span] += strength * (1.1 * np.exp(-(((late - 8.0) / 7.0) ** 2))
                                               + 0.3 * np.exp(-(((late - 28.0) / 12.0) ** 2)))  # fmt: skip
        if rng.random() < 0.67:
            shift = int(np.round(rng.normal(0, 2.0)))
            a, b = np.clip([begin + shift, last + shift], 0, days * 8)
            told_ap.reshape(-1)[a:b] = top * rng.uniform(0.5, 1.4)
    for _ in range(len(at) // 3):  # false alarms
        begin = int(rng.integers(0, days * 8 - 8))
        told_ap.reshape(-1)[begin : begin + 5] = rng.uniform(45, 90)
    expected[:-1, 0], expected[:-2, 1] = told_ap[1:], told_ap[2:]

    factor = np.exp(weather + hourly + np.clip(effect, -0.9, 1.0))[:, :, None] * np.exp(local_weather)
    delay = shape[None] * (year * sun)[:, None, None] * factor
    sigma = 0.06 + 0.03 * delay
    measured = np.maximum(delay + sigma * 0.7 * rng.normal(0, 1, delay.shape), 0.05)

    wander = np.zeros(days)
    for number in range(1, days):
        wander[number] = 0.5 * wander[number - 1] + 0.25 * rng.normal()
    slope = 0.5 * delay * np.exp(wander[:, None, None] + steep[:, :, None] + 0.2 * rng.normal(0, 1, (days, 24, 1))
                                 + 0.3 * rng.normal(0, 1, delay.shape))  # fmt: skip
    states = np.stack([np.where(slope > u.broken, BROKEN, np.where(slope > u.strained, STRAINED, HOLDS)) for u in USES])

    # Nights when the network was down, and cells that are not always seen.
    unseen = rng.random((days, 24, places)) < 0.03
    for gap in rng.integers(0, days, max(1, days // 60)):
        unseen[gap] = True
    measured[unseen], slope[unseen] = np.nan, np.nan
    states[:, unseen] = UNSEEN
    history = History(
        days=(start + day).astype("datetime64[D]"), names=np.array([f"place {n}" for n in range(places)]), lats=lats,
        lons=lons, delay=measured, sigma=np.where(unseen, np.nan, sigma), slope=slope, states=states.astype(np.uint8),
        limits=USES,
    )  # fmt: skip
    return Year(history, Drivers(ap, expected, flux), at)
