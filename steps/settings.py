"""Every setting of a survey: name, unit, bound, default and source. The demo's survey.yaml is the manual.

What is physical about a particular survey has no default; choices of method do. Settings are read and checked once,
before any work, and every mistake is told at once with its line.
"""

import codecs
import re
from datetime import datetime
from typing import Annotated, Literal

from pydantic import BaseModel, ConfigDict, Field, model_validator

FILE = "survey.yaml"


class Section(BaseModel):
    """Base of all sections: frozen, and an unknown key is a mistake."""

    model_config = ConfigDict(frozen=True, extra="forbid", allow_inf_nan=False)


Cell = Annotated[str, Field(coerce_numbers_to_str=True)]
Files = Annotated[list[str], Field(min_length=1, description="files or patterns, relative to the survey's folder")]
Kind = Literal["line", "tie", "calibration", "transit"]
Term = Literal["auto", "on", "off"]


# -- the survey ------------------------------------------------------------------------------------------------------


class Survey(Section):
    """Who measured what, for the headers of the products."""

    name: str = Field(min_length=1, max_length=300, description="name of the survey")
    vessel: str = Field("", description="ship")
    institution: str = Field("", description="who is responsible for the data")
    processor: str = Field("", description="who reduces the data")
    comment: str = Field("", description="anything a reader of the products should know")


# -- raw files -------------------------------------------------------------------------------------------------------


class Clock(Section):
    """How an instrument's clock stood against UTC; correction is added to the logged time."""

    time_scale: Literal["utc", "gps"] = Field("utc", description="scale the instrument stamps in")
    offset_s: float = Field(
        ge=-1.3e9,
        le=1.3e9,
        description="seconds to add to the logged time to get it right; a week rollover of GNSS is 619315200",
    )
    drift_s_per_day: float = Field(
        0.0, ge=-100, le=100, description="further seconds to add for each day after `reference`"
    )
    reference: datetime | None = Field(None, description="instant (UTC) at which offset_s holds; needed with a drift")

    @model_validator(mode="after")
    def _drift_needs_reference(self):
        if self.drift_s_per_day and self.reference is None:
            raise ValueError("needs `reference`, the instant at which offset_s holds, because drift_s_per_day is not 0")
        return self


LAYOUT_CODES = "YymdjbBHIMSfpz"  # of strptime; those that depend on the machine's language or zone are not taken


class Time(Section):
    """Where the time of a delimited file stands and how it is written."""

    columns: list[str] = Field(
        min_length=1, max_length=4, description="columns that hold date and time, in the order of `layout`"
    )
    layout: str = Field(
        "iso",
        description="iso, epoch_s, or a strptime pattern for the columns joined by one blank, e.g. '%Y %j %H:%M:%S.%f'",
    )

    @model_validator(mode="after")
    def _layout_names_a_time(self):
        if self.layout == "iso":
            return self
        if self.layout == "epoch_s":
            if len(self.columns) > 1:
                raise ValueError("needs one column with `layout: epoch_s`")
            return self
        codes = re.findall("%(.?)", self.layout.replace("%%", ""))
        unknown = [f"%{code}" for code in codes if code not in LAYOUT_CODES or not code]
        if unknown:
            known = " ".join(f"%{code}" for code in LAYOUT_CODES)
            raise ValueError(f"needs a `layout` of {known}, iso or epoch_s; {unknown[0]} is none of them")
        if len(set(codes)) < len(codes):
            raise ValueError("needs a `layout` that names each part once")
        if not {"Y", "y"} & set(codes) or not ("j" in codes or ("d" in codes and {"m", "b", "B"} & set(codes))):
            raise ValueError("needs a `layout` with year and day (%Y %m %d, or %Y %j), iso, or epoch_s")
        if "I" in codes and "p" not in codes:
            raise ValueError("needs %p beside %I in `layout`")
        return self


class Delimited(Section):
    """A delimited text file: one record a row, columns by the names of its heading row."""

    format: Literal["delimited"]
    files: Files
    delimiter: str = Field(
        ",", min_length=1, max_length=5, description="one character, or tab, or space for any run of blanks"
    )
    skip_rows: int = Field(0, ge=0, le=1000, description="rows before the heading row (or before the data)")
    names: list[Cell] | None = Field(None, description="names of the columns, for a file without a heading row")
    comment: str | None = Field("#", max_length=1, description="rows that start with this character are skipped")
    decimal: Literal[".", ","] = Field(".", description="decimal mark")
    encoding: str = Field("utf-8", description="character encoding")
    missing: list[Cell] = Field(
        ["", "NaN", "nan", "NA"], description="cells that mean: no value; a number means every cell of that value"
    )
    time: Time

    @model_validator(mode="after")
    def _text_can_be_split(self):
        delimiter = {"tab": "\t", "space": " "}.get(self.delimiter, self.delimiter)
        if len(delimiter) != 1 or not (delimiter.isascii() and (delimiter.isprintable() or delimiter == "\t")):
            raise ValueError("needs a `delimiter` of one character, or tab, or space")
        if delimiter.isalnum() or delimiter in '+-."' or delimiter == self.decimal:
            raise ValueError("needs a `delimiter` that is no letter, digit, sign, quote or decimal mark")
        if self.comment is not None and not (self.comment.isascii() and self.comment != delimiter):
            raise ValueError("needs a `comment` that is ASCII and not the delimiter")
        try:
            codecs.lookup(self.encoding)
            "".encode(self.encoding)
        except (LookupError, UnicodeError, TypeError):
            raise ValueError("needs an `encoding` that is known, such as utf-8, latin-1 or utf-16") from None
        if self.names is not None:
            repeated = sorted({name for name in self.names if self.names.count(name) > 1})
            if repeated:
                raise ValueError(f"needs each of `names` once; {repeated[0]} stands twice")
            columns = getattr(self, "columns", None)
            wanted = [*self.time.columns, *(columns.model_dump().values() if columns else [])]
            absent = [name for name in wanted if name is not None and name not in self.names]
            if absent:
                raise ValueError(f"needs every column that is used in `names`; {absent[0]} is not")
        return self


class ReadingColumns(Section):
    """Which column of a logger file holds what."""

    total_field_nt: str = Field(description="column of the total field, nT")
    signal: str | None = Field(None, description="column of the signal strength, logger's own unit")
    logged_depth_m: str | None = Field(None, description="column of the sensor depth, m, positive downwards")
    water_depth_m: str | None = Field(None, description="column of the water depth, m, positive downwards")


class DelimitedReadings(Delimited):
    """The magnetometer logger's files."""

    columns: ReadingColumns
    clock: Clock


class NavigationColumns(Section):
    """Which column of a delimited navigation file holds what."""

    latitude_deg: str = Field(
        description="column of the latitude: decimal degrees, or degrees and minutes with a letter"
    )
    longitude_deg: str = Field(description="column of the longitude")
    heading_deg: str | None = Field(None, description="column of the gyro heading, degrees")


class DelimitedNavigation(Delimited):
    """Navigation as delimited text."""

    columns: NavigationColumns
    clock: Clock


class NmeaNavigation(Section):
    """Navigation as NMEA 0183 sentences."""

    format: Literal["nmea"]
    files: Files
    clock: Clock = Clock(offset_s=0.0)
    stamp: Literal["sentence", "logger"] = Field(
        "sentence", description="time of a fix: as the sentence says, or the logger's stamp before it"
    )
    use: list[Literal["fix", "heading"]] = Field(["fix", "heading"], description="what is taken from these files")


class TracklineData(Section):
    """An MGD77T file: readings and navigation of a whole survey."""

    format: Literal["mgd77t"]
    files: Files


class BaseColumns(Section):
    """Which column of a delimited base-station file holds what."""

    total_field_nt: str = Field(description="column of the total field, nT")


class DelimitedBase(Delimited):
    """A base station's record as delimited text."""

    name: str = Field(min_length=1, description="name of the station")
    latitude_deg: float = Field(ge=-90, le=90, description="geodetic latitude, north positive")
    longitude_deg: float = Field(ge=-360, le=360, description="longitude, east positive")
    height_m: float = Field(0.0, ge=-500, le=9000, description="height above the ellipsoid")
    columns: BaseColumns
    clock: Clock


class ObservatoryBase(Section):
    """A base station's record in IAGA-2002 files; position from their header unless stated."""

    format: Literal["iaga2002"]
    files: Files
    name: str = Field(min_length=1, description="name of the station")
    latitude_deg: float | None = Field(None, ge=-90, le=90, description="overrides the header; geodetic latitude")
    longitude_deg: float | None = Field(None, ge=-360, le=360, description="overrides the header; east positive")
    height_m: float | None = Field(
        None, ge=-500, le=9000, description="overrides the header; height above the ellipsoid"
    )
    clock: Clock = Clock(offset_s=0.0)


class Ingest(Section):
    """Raw readings and navigation."""

    readings: Annotated[DelimitedReadings | TracklineData, Field(discriminator="format")]
    navigation: list[Annotated[DelimitedNavigation | NmeaNavigation | TracklineData, Field(discriminator="format")]] = (
        Field(
            min_length=1,
            description="navigation sources, in order of preference: a later one fills gaps of over a minute",
        )
    )


# -- stages ----------------------------------------------------------------------------------------------------------


class Lines(Section):
    """Which readings belong to which line."""

    log: str | None = Field(
        None, description="line log, CSV: line, kind, start_utc, end_utc; without it lines are found"
    )
    course_tolerance_deg: float = Field(
        15.0, gt=0, le=90, description="lines found: course stays within this of the line's own"
    )
    shortest_line_km: float = Field(10.0, gt=0, description="lines found: shorter stretches are transit")
    longest_gap_s: float = Field(1800.0, gt=0, description="lines found: a longer silence ends a line")


class Screen(Section):
    """Tests of single readings."""

    lowest_nt: float = Field(20000.0, ge=0, description="total field below this is out of range (common practice)")
    highest_nt: float = Field(70000.0, le=1e5, description="total field above this is out of range (common practice)")
    lowest_signal: float | None = Field(None, description="signal below this is rejected; the maker states the limit")
    window: int = Field(15, ge=5, le=601, description="readings in the moving window of the spike test, odd")
    threshold: float = Field(6.0, gt=0, description="spike: departs from the running median by this many robust sigmas")
    smallest_spike_nt: float = Field(2.0, ge=0, description="no departure below this is a spike")
    longest_repeat: int = Field(10, ge=2, description="this many equal readings in a row are a dropout")
    coarsest_s: float = Field(120.0, gt=0, description="no spike test where readings are further apart than this")


class AntennaToTowPoint(Section):
    """Where the cable leaves the ship, seen from the antenna, in the ship's frame."""

    forward_m: float = Field(ge=-500, le=500, description="forward of the antenna positive (the stern is negative)")
    starboard_m: float = Field(ge=-100, le=100, description="to starboard positive")


class Layback(Section):
    """How far behind the tow point the sensor is, and along which path."""

    model: Literal["pursuit", "same_track", "astern", "none"] = Field(
        "pursuit",
        description="pursuit curve of the tow point; same track, so far back; straight astern; none: at the antenna",
    )
    log: str | None = Field(None, description="cable log, CSV: time_utc, cable_out_m; steps in time")
    cable_out_m: float | None = Field(None, ge=0, le=5000, description="constant cable-out, where there is no log")
    cable_form: Literal["straight", "fraction"] = Field(
        "straight", description="straight cable sqrt(c^2 - depth^2), or a fraction of it"
    )
    fraction: float = Field(
        1.0, gt=0, le=1, description="layback as a fraction of cable-out, with cable_form: fraction"
    )

    @model_validator(mode="after")
    def _cable_known(self):
        if self.model != "none" and (self.log is None) == (self.cable_out_m is None):
            raise ValueError("needs exactly one of `log` and `cable_out_m` (or model: none)")
        return self


class Position(Section):
    """From the ship's antenna to the towed sensor."""

    antenna_to_tow_point: AntennaToTowPoint
    layback: Layback
    sensor_depth_m: float | None = Field(
        None, ge=-500, le=6000, description="depth where none is logged; positive downwards"
    )
    fastest_ship_mps: float = Field(12.0, gt=0, le=60, description="navigation that needs more speed is dropped")
    longest_gap_s: float = Field(120.0, gt=0, description="longest gap in navigation that is bridged")
    smoothing_s: float = Field(
        30.0, ge=0, le=600, description="time constant of the smoothing of the navigation; 0 for none"
    )
    sigma_navigation_m: float = Field(3.0, gt=0, description="error of a fix, one sigma per axis")
    sigma_layback_m: float = Field(10.0, ge=0, description="error of the layback, one sigma")


class MainField(Section):
    """IGRF-14 at the sensor."""

    sea_surface_height_m: float = Field(
        0.0, ge=-120, le=120, description="sea surface above the ellipsoid at the survey (geoid height)"
    )
    tolerance_nt: float = Field(
        0.002, ge=0.001, le=1, description="largest departure from exact synthesis that is allowed"
    )


class Diurnal(Section):
    """External variation from base stations."""

    base_stations: list[Annotated[DelimitedBase | ObservatoryBase, Field(discriminator="format")]] = Field(
        [], description="base stations; none is a legal survey: the term is then missing"
    )
    datum: Literal["quiet_night", "survey_mean"] | float = Field(
        "quiet_night", description="level of a station that counts as no variation; a number is nT after the main field"
    )
    low_pass_s: float = Field(60.0, ge=0, le=3600, description="noise of the base below this period is not passed on")
    longest_gap_s: float = Field(900.0, ge=0, description="longest gap in a station's record that is bridged")
    local_time_shift: bool = Field(True, description="shift the slow part to the ship's local solar time")
    slow_period_h: float = Field(5.0, gt=0, le=24, description="periods longer than this are the slow part")
    combine: Literal["distance", "plane", "nearest"] = Field(
        "distance", description="how several stations are combined"
    )
    chord_min: float = Field(10.0, gt=0, le=180, description="disturbance: length of the chord")
    disturbed_nt: float = Field(
        5.0, gt=0, description="disturbance: departure from the chord (common practice: a few nT)"
    )
    sigma_at_base_nt: float = Field(0.5, ge=0, description="error of the term near the station, one sigma")
    sigma_nt_per_100km: float = Field(
        1.0, ge=0, description="growth of that error with distance, where it cannot be estimated"
    )


class Heading(Section):
    """Effect of the ship's and the sensor's heading."""

    use: Literal["calibration", "none"] = Field(
        "calibration", description="estimate from calibration lines, or leave out"
    )
    angle: Literal["ship_heading", "tow_direction"] = Field("ship_heading", description="the angle of the harmonics")
    significance: float = Field(0.01, gt=0, lt=1, description="F-test level at which a harmonic is applied")
    widest_gap_deg: float = Field(
        100.0, gt=0, le=360, description="not fitted where headings leave a wider gap in the circle"
    )
    sigma_leg_nt: float = Field(
        1.0, ge=0, le=1000, description="expected error of a whole calibration leg, one sigma; it is then estimated"
    )


class Crossovers(Section):
    """Intersections of sensor tracks."""

    kinds: list[Kind] = Field(["line", "tie"], min_length=1, description="kinds of line whose crossings are used")
    smallest_angle_deg: float = Field(15.0, ge=0, lt=90, description="crossings at smaller angles are listed, not used")
    longest_gap_s: float = Field(60.0, gt=0, description="no crossing is taken inside a longer gap")
    shortest_loop_km: float = Field(
        10.0, ge=0, description="a line's crossing with itself after a shorter way is a turn, no observation"
    )
    gradient_window_m: float = Field(
        500.0, gt=0, description="length over which value and along-track gradient are fitted"
    )


class Levelling(Section):
    """Adjustment of the lines, and of the other corrections, to each other at the crossings.

    A term is off, on, or kept only if it lowers the leave-one-out figure of the crossings (auto).
    """

    line_drift: Term = Field("auto", description="drift of each line: linear, and smooth in time")
    time_drift: Term = Field(
        "auto", description="drift in time common to all lines of a survey: what is left of the external field"
    )
    heading: Term = Field("auto", description="heading harmonics, with the calibration as prior")
    diurnal_scale: Term = Field("auto", description="scale on the variation of the base stations")
    layback: Term = Field("auto", description="error of the layback, of all lines alike")
    clock: Term = Field("auto", description="error of the logger's clock")
    apply: list[Literal["layback", "clock"]] = Field(
        [], description="position errors that are not only estimated but corrected for"
    )
    drift_scales_h: Annotated[list[Annotated[float, Field(gt=0.05, le=1000)]], Field(min_length=1, max_length=4)] = (
        Field([1.5, 6.0], description="drifts: correlation times, h; the variance of each is estimated")
    )
    knots_h: float = Field(0.25, ge=0.01, le=1000, description="drifts: longest time between the knots, h")
    sigma_heading_nt: float = Field(
        10.0, gt=0, le=1000, description="expected size of a heading coefficient without calibration, nT"
    )
    sigma_diurnal_scale: float = Field(
        0.05, gt=0, le=1, description="expected departure from 1 of the scale on the base stations' variation"
    )
    sigma_layback_m: float | None = Field(
        None, gt=0, le=1000, description="expected error of the layback, m; without it that of section position"
    )
    sigma_clock_s: float = Field(1.0, gt=0, le=1000, description="expected error of the logger's clock, s")
    sigma_without_base_nt: float = Field(
        20.0, gt=0, le=2000, description="expected size of the external variation where no base station tells it, nT"
    )
    robust: bool = Field(True, description="weigh down and then reject crossings that do not fit")
    hold: list[str] = Field(
        [], description="lines whose correction is held at zero; empty: weighted mean zero per network"
    )


class Profiles(Section):
    """The product: one profile a line."""

    kinds: list[Kind] = Field(["line", "tie"], min_length=1, description="kinds of line that get a profile")
    azimuth_deg: float | None = Field(
        None, ge=0, lt=360, description="azimuth to project on; without it each line's own best-fit one"
    )
    increasing_towards_deg: float = Field(
        90.0, ge=0, lt=360, description="distance grows towards this azimuth, whatever way the ship ran"
    )
    spacing_km: float = Field(0.1, gt=0, le=50, description="spacing of the even samples")
    longest_gap_km: float = Field(0.5, gt=0, description="gaps longer than this stay gaps")
    gradient_window_m: float = Field(
        500.0, gt=0, description="length over which the gradient is fitted that turns errors of position into nT"
    )


class Exports(Section):
    """Open formats for others; it has no settings."""


class Report(Section):
    """Summary and figures."""

    exaggeration_nt_per_km: float | None = Field(
        None, gt=0, description="scale of the stacked profiles; without it chosen to fit"
    )


class Single(Section):
    """The settings file of one survey."""

    survey: Survey
    ingest: Ingest
    lines: Lines
    screen: Screen = Screen()
    position: Position
    main_field: MainField = MainField()
    diurnal: Diurnal
    heading: Heading = Heading()
    crossovers: Crossovers = Crossovers()
    levelling: Levelling = Levelling()
    profiles: Profiles = Profiles()
    exports: Exports = Exports()
    report: Report = Report()
    edits: str | None = Field(None, description="edits file, CSV written by a person")


class Collection(Section):
    """The settings file of several surveys that are levelled together."""

    survey: Survey
    members: list[str] = Field(min_length=1, description="folders of the member surveys, names or patterns")
    crossovers: Crossovers = Crossovers()
    levelling: Levelling = Levelling()
    report: Report = Report()


SECTIONS = {
    "ingest": Ingest,
    "lines": Lines,
    "screen": Screen,
    "position": Position,
    "main_field": MainField,
    "diurnal": Diurnal,
    "heading": Heading,
    "crossovers": Crossovers,
    "levelling": Levelling,
    "profiles": Profiles,
    "exports": Exports,
    "report": Report,
}


def section(stage: str, values: dict) -> Section:
    """Rebuild a stage's settings from what the Snakefile hands over."""
    return SECTIONS[stage].model_validate(values)
