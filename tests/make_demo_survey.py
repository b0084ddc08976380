"""Write the raw files of demo_survey from its seed: ``python tests/make_demo_survey.py [folder]``."""

import shutil
import sys
from pathlib import Path

import pandas as pd
from raw_files import Style, write
from synthetic import Base, Scenario, Survey, simulate

FOLDER = Path(__file__).parents[1] / "demo_survey"

SCENARIO = Scenario(
    seed=1906,
    latitude_deg=44.3,
    longitude_deg=-28.1,
    start="2024-06-10T05:00:00",
    sampling_s=1.0,
    sea_surface_height_m=52.0,
    lines=10,
    line_length_km=56.0,
    line_spacing_km=4.0,
    ties=4,
    tie_positions=(-0.68, -0.3, 0.36, 0.72),
    calibration_length_km=3.0,
    speed_mps=5.2,
    rounding_s=60.0,
    ridge_azimuth_deg=18.0,
    half_rate_km_per_ma=(11.0, 12.5),
    magnetisation_a_m=10.0,
    seamounts=6,
    cable_m=230.0,
    cable_changes=((9, 280.0), (11, 230.0), (13, 250.0), (17, 230.0)),
    forward_m=-47.5,
    starboard_m=3.2,
    sq_nt=28.0,
    storm_nt=70.0,
    diurnal_gain=1.02,
    diurnal_own_nt=0.3,
    bases=(
        Base(
            name="Kittiwake Island",
            distance_km=170.0,
            azimuth_deg=112.0,
            height_m=94.0,
            own_nt=0.3,
            gaps=((13.2, 0.15), (34.0, 0.75)),
        ),
    ),
    heading_nt=(5.0, -2.5, 1.1, 0.8),
    line_shift_nt=0.8,
    noise_nt=0.08,
    resolution_nt=0.001,
    spikes_per_1000=0.8,
    faults_h=(
        (6.0, 240.0, "passing ship"),
        (16.2, 50.0, "repeat"),
        (23.4, 240.0, "gap"),
        (29.7, 60.0, "low signal"),
    ),
    clock_offset_s=3.4,
    clock_drift_s_per_day=0.12,
    navigation_s=1.0,
    fix_noise_m=1.0,
    fix_wander_m=0.8,
    wild_fixes=6,
    navigation_gaps_h=((12.3, 75.0), (26.6, 300.0)),
)

# A line is misnamed in the line log; a row of edits.csv gives it its name.
MISNAMED = ("L108", "L180")

# One row of the cable log is keyed wrongly: 330 m for 230 m.
WRONG_ROW, WRONG_CABLE_M = 2, 330.0

STYLE = Style(
    seed=1906,
    cut_short=True,
    header=("RV HALCYON DAWN (invented) - towed magnetometer, sensor 2", "time base: logger PC; units: counts; m; nT"),
)


def demo(*, wrong_cable: bool = True) -> Survey:
    """Simulate the demo survey, truth included; its cable log as shipped or, on request, right."""
    survey = simulate(SCENARIO)
    if wrong_cable:
        survey.cable.loc[WRONG_ROW, "cable_out_m"] = WRONG_CABLE_M
    return survey


def main(folder: Path = FOLDER) -> None:
    """Write the raw files, the line log and the cable log."""
    survey = demo()
    survey.lines["line"] = survey.lines["line"].replace(*MISNAMED)
    shutil.rmtree(folder / "raw", ignore_errors=True)
    paths = write(survey, folder, STYLE, codes=("XKI",), comments=("Invented station, simulated record.",))
    print(survey.lines.to_string(), survey.cable.to_string(), sep="\n")
    print(pd.Series({str(p.relative_to(folder)): p.stat().st_size for p in paths}).to_string())
    print(f"{sum(p.stat().st_size for p in paths) / 1e6:.2f} MB")


if __name__ == "__main__":
    main(*map(Path, sys.argv[1:]))
