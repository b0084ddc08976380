"""Laws that the diurnal term keeps for any record: nothing invented, no dependence on what does not matter."""

import json
from types import SimpleNamespace

import numpy as np
import pytest
from test_diurnal import AROUND, DAY, START, START_S, at_ship, record, sloping, stations_of

from steps.diurnal import calibrate, make_stations, predict, sigma
from steps.settings import Diurnal


@pytest.mark.parametrize("combine", ["distance", "plane", "nearest"])
def test_constants_turns_of_360_degrees_and_the_order_of_stations_change_nothing(combine):
    def field(s, lat, lon):
        return sloping(s, lat, lon) + 20 * np.cos(2 * np.pi * (s / 3600 + lon / 15) / 24)

    def found(records, lon):
        law, _ = calibrate(own := stations_of(*records), settings=Diurnal(combine=combine))
        value = at_ship(own, at, 44.5, lon, combine=combine)
        return value.variation_nt, sigma(value, law)

    at = np.arange(0.1 * DAY, 2.9 * DAY, 600.0)
    records = [record(n, lambda s, a=a, b=b: field(s, a, b), lat=a, lon=b) for n, a, b in AROUND]
    expected = found(records, -20.5)
    higher = [SimpleNamespace(**vars(r) | {"total_field_nt": r.total_field_nt + 1000.0}) for r in records]
    turned = [SimpleNamespace(**vars(r) | {"longitude_deg": r.longitude_deg + 360.0}) for r in records]
    for changed, lon in ((higher, -20.5), (turned, -20.5), (records, 339.5), (records[::-1], -20.5)):
        for one, other in zip(found(changed, lon), expected, strict=True):
            np.testing.assert_allclose(one, other, rtol=1e-9, atol=1e-7)


def random_record(rng, number):
    """Make a record of any length, rate, jitter and holes, at any place."""
    n, step = int(rng.choice([0, 1, 2, 3, 10, 61, 500, 3000])), float(rng.choice([0.1, 1, 5, 60, 61.7, 300, 3600]))
    at = rng.uniform(-90000, 90000) + np.arange(n) * step + rng.normal(0, step, n) * (rng.random() < 0.3)
    keep = rng.random(n) < rng.choice([1, 0.9, 0.3])
    if n > 10 and rng.random() < 0.5:
        first = rng.integers(0, n)
        keep[first : first + rng.integers(0, n)] = False
    time = np.unique(START + (at[keep] * 1e9).astype("int64").astype("timedelta64[ns]"))
    wave = np.sin(2 * np.pi * (time - START).astype(float) / 1e9 / rng.choice([600, 20000, 86400]))
    return SimpleNamespace(
        name=f"S{number}",
        latitude_deg=float(rng.choice([0, 45, -90, 90, rng.uniform(-90, 90)])),
        longitude_deg=float(rng.choice([-180, 0, 179.9, rng.uniform(-180, 180)])),
        height_m=0.0,
        time_utc=time,
        total_field_nt=50000 + rng.choice([0, 1, 30]) * wave + rng.normal(0, 0.1, len(time)),
    )


@pytest.mark.filterwarnings("error")
@pytest.mark.parametrize("seed", range(150))
def test_any_records_give_finite_values_with_a_sigma_or_none(seed):
    rng = np.random.default_rng(seed)
    records = [random_record(rng, number) for number in range(rng.integers(1, 6))]
    # a record coarser than the longest gap is refused, which has its own test
    records = [r for r in records if len(r.time_utc) < 2 or np.median(np.diff(r.time_utc)) <= np.timedelta64(900, "s")]
    settings = Diurnal(
        combine=str(rng.choice(["distance", "plane", "nearest"])),
        datum=("quiet_night", "survey_mean")[rng.integers(2)],
        low_pass_s=float(rng.choice([0, 60, 600])),
        longest_gap_s=float(rng.choice([900, 7200])),
        local_time_shift=bool(rng.random() < 0.7),
        slow_period_h=float(rng.choice([0.5, 5, 24])),
        chord_min=float(rng.choice([1, 10, 180])),
        sigma_at_base_nt=float(rng.choice([0, 0.5])),
        sigma_nt_per_100km=float(rng.choice([0, 1])),
    )
    n = int(rng.integers(0, 500))
    at, lat, lon = (
        np.sort(rng.uniform(-90000, 90000, n)),
        rng.choice([90, -90, 45, np.nan], n),
        rng.uniform(-180, 180, n),
    )
    own, about = make_stations(records, (START_S - 90000, START_S + 90000), settings=settings)
    law, rows = calibrate(own, settings=settings)
    json.dumps([about, rows, vars(law)], allow_nan=False)
    found = predict(own, START_S + at, lat, lon, settings=settings)
    one, known = sigma(found, law), np.isfinite(found.variation_nt)
    np.testing.assert_array_equal(np.isfinite(one), known)
    np.testing.assert_array_equal(found.nearest >= 0, known)
    assert not known[np.isnan(lat)].any()
    assert np.abs(found.variation_nt[known]).max(initial=0) < 200.0  # the records vary by 60 nT at most
