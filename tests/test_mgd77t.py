"""MGD77T against the written field rules, real files of the trackline archive, and itself.

Field rules: NGDC, Key to geophysical records documentation No. 10 (revised), February 2010. Real files: NCEI trackline
geophysical archive, surveys NBP9908, RC2107 and ELT03.
"""

import gzip

import numpy as np
import pandas as pd
import pytest

from steps.columns import Flag
from steps.errors import SurveyError
from steps.formats import mgd77t
from steps.formats.mgd77t import as_header, as_mgd77t, longitude_span, read_header, read_mgd77t, ten_degree_codes

HEADING = "\t".join(mgd77t.DATA_FIELDS)
RECORD = "X1\t0\t20240301\t0407\t-10.5\t170.25\t1\t\t\t4000\t\t\t\t45000.5"


def written(folder, *rows, end="\n", name="x.m77t"):
    path = folder / name
    path.write_bytes(end.join([*rows, ""]).encode("latin-1"))
    return path


def record(**cells):
    """One record as text, trailing tabs left out."""
    given = {"SURVEY_ID": "X1", "TIMEZONE": "0", "DATE": "20240301", "TIME": "0407", "LAT": "1.5", "LON": "2.5"} | cells
    return "\t".join(given.get(name, "") for name in mgd77t.DATA_FIELDS).rstrip("\t")


# -- the field rules -------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("text", "seconds"),
    [
        ("2359.6667", 86380.0),  # the documentation's own example: 23:59:40
        ("0407", 14820.0),
        ("407", 14820.0),
        ("0001", 60.0),
        ("0", 0.0),
        ("0001.5", 90.0),
        ("0000.07", 4.2),  # 4.2 s exactly: no whole second is meant
        ("1200.016667", 43201.0),
        ("1200.016683", 43201.001),
        ("2400", 86400.0),
    ],
)
def test_time_is_hours_and_minutes_with_decimals_of_a_minute(tmp_path, text, seconds):
    table, _ = read_mgd77t(written(tmp_path, record(TIME=text)))
    assert (table["time_utc"][0] - pd.Timestamp("2024-03-01")).total_seconds() == pytest.approx(seconds, abs=1e-9)


def test_the_time_zone_is_added_to_get_universal_time(tmp_path):
    table, counts = read_mgd77t(
        written(tmp_path, record(TIMEZONE="4"), record(TIMEZONE="-5.5"), record(TIMEZONE=""), record(TIMEZONE="-13"))
    )
    hours = (table["time_utc"] - pd.Timestamp("2024-03-01 04:07")) / pd.Timedelta("1h")
    assert hours.tolist() == [-13.0, -5.5, 0.0, 4.0]
    assert (counts["without_timezone"], counts["backwards"]) == (1, 2)


def test_a_diurnal_correction_that_the_file_has_applied_is_taken_off_again(tmp_path):
    # "if present, total and residual are already corrected", and all corrections are added
    rows = [record(MAG_TOT="45010.2", MAG_DICORR="10.2", MAG_RES="110.2"), record(MAG_TOT="45010.2", TIME="0408")]
    table, counts = read_mgd77t(written(tmp_path, *rows, record(MAG_DICORR="3", TIME="0409")))
    np.testing.assert_array_equal(table["total_field_nt"], [45000.0, 45010.2, np.nan])
    np.testing.assert_array_equal(table["mag_residual_nt"], [110.2, np.nan, np.nan])
    assert (counts["corrected"], counts["without_reading"]) == (1, 1)


def test_heading_row_extra_tabs_blank_rows_line_ends_and_packing_make_no_difference(tmp_path):
    plain, _ = read_mgd77t(written(tmp_path, RECORD))
    full = RECORD + "\t" * (25 - RECORD.count("\t"))
    variants = {
        "heading.m77t": ([HEADING, RECORD], "\n"),
        "extra.m77t": ([HEADING + "\t", full + "\t \t"], "\r\n"),
        "old_mac.m77t": ([HEADING, full], "\r"),
        "blank.m77t": (["", HEADING, " \t ", RECORD, ""], "\n"),
        "other_names.m77t": (["id\tzone\tdate\ttime\tlat\tlon\tfix", RECORD], "\n"),
        "byte_order_mark.m77t": (["\xef\xbb\xbf" + HEADING, RECORD], "\n"),
        "odd_letters.m77t": ([HEADING, "Stra\xdfe" + RECORD[2:]], "\n"),
    }
    for name, (rows, end) in variants.items():
        table, counts = read_mgd77t(written(tmp_path, *rows, end=end, name=name))
        pd.testing.assert_frame_equal(table.drop(columns="source_row"), plain.drop(columns="source_row"))
        assert counts["rows"] == counts["heading"] + counts["blank"] + counts["records"]
        assert counts["records"] == 1
    packed = tmp_path / "packed.m77t.gz"
    packed.write_bytes(gzip.compress(f"{HEADING}\n{RECORD}".encode()))
    assert read_mgd77t(packed)[0]["source_row"].tolist() == [2]


def test_rows_of_any_length_and_legs_out_of_order_are_all_accounted_for(tmp_path):
    rows = [
        HEADING,
        record(TIME="0500", MAG_TOT="45000"),
        record(TIME="0400", POS_TYPE="1"),  # position only: navigation
        record(TIME="0400.5", LAT="", MAG_TOT="45001"),
        record(TIME="0500", MAG_TOT="45002"),
        record(TIME=""),
        record(TIME="0300", MAG_TOT2="45003", POINTID="last field"),
        "X1",
    ]
    table, counts = read_mgd77t(written(tmp_path, *rows))
    assert table["source_row"].tolist() == [7, 3, 4, 2, 5]  # of equal times the first in the file stays first
    assert counts == {
        "rows": 8,
        "heading": 1,
        "blank": 0,
        "records": 7,
        "without_time": 2,
        "without_position": 1,
        "without_reading": 2,
        "second_sensor_only": 1,
        "corrected": 0,
        "without_timezone": 0,
        "backwards": 2,
    }
    assert len(table) == counts["records"] - counts["without_time"]


def test_longitudes_are_brought_into_range_and_depths_keep_their_sign(tmp_path):
    rows = [record(LON=lon, MAG_SDEPTH="-3", CORR_DEPTH="12") for lon in ("180", "-180", "190", "-73.8351")]
    table, _ = read_mgd77t(written(tmp_path, *rows))
    assert table["longitude_deg"].tolist() == [-180.0, -180.0, -170.0, -73.8351]
    assert table["logged_depth_m"].tolist() == [-3.0] * 4
    assert table["water_depth_m"].tolist() == [12.0] * 4


def test_blocks_of_a_long_file_join_without_a_seam(tmp_path, monkeypatch):
    rows = [HEADING, *(record(TIME=f"{k // 60:02d}{k % 60:02d}", MAG_TOT=str(40000 + k)) for k in range(600))]
    whole, counts = read_mgd77t(written(tmp_path, *rows, end="\r\n"))
    monkeypatch.setattr(mgd77t, "BLOCK", 100)
    pieces, again = read_mgd77t(written(tmp_path, *rows, end="\r\n"))
    pd.testing.assert_frame_equal(pieces, whole)
    assert again == counts
    assert whole["source_row"].tolist() == list(range(2, 602))


# -- mistakes --------------------------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("rows", "sentence"),
    [
        ([""], r"x.m77t: must hold MGD77T records\. Got an empty file\."),
        ([HEADING], r"x.m77t: must hold at least one data record\. Got none\."),
        (["a,b,c"], r"row 1: must be a tab-delimited MGD77T record\. Got a,b,c\."),
        (["X1\tMGD77T\t1"], r"row 1: must be a data record\. Got a header record\. Name the \.m77t file\."),
        ([record(LAT="91")], r"row 1, LAT: must be between -90 and 90\. Got 91\."),
        ([record(LON="361")], r"row 1, LON: must be between -360 and 360\. Got 361\."),
        ([record(TIMEZONE="14")], r"row 1, TIMEZONE: must be between -13 and 12\. Got 14\."),
        ([HEADING, record(LAT="1,5")], r"row 2, LAT: must be a number, or nil where it is not known\. Got 1,5\."),
        ([record(MAG_TOT="nan")], r"row 1, MAG_TOT: must be a number, or nil .* Got nan\."),
        ([record(MAG_TOT="4_5")], r"row 1, MAG_TOT: must be a number, or nil .* Got 4_5\."),
        ([record(DATE="20230229")], r"row 1, DATE: must be a date as YYYYMMDD\. Got 20230229\."),
        ([record(DATE="990818")], r"row 1, DATE: must be a date as YYYYMMDD\. Got 990818\."),
        ([record(TIME="0460")], r"row 1, TIME: must be hours and minutes as HHMM.* Got 0460\."),
        ([record(TIME="2400.5")], r"row 1, TIME: must be hours and minutes"),
        ([record(TIME="-1")], r"row 1, TIME: must be hours and minutes"),
        ([record(), RECORD + "\t" * 13 + "one too many"], r"row 2: must have at most 26 fields\. Got 27\."),
        ([record(TIME="12:00\x00")], r"x.m77t: must be MGD77T text\. Got a binary file"),
    ],
)
def test_a_mistake_is_one_sentence_with_file_row_and_field(tmp_path, rows, sentence):
    with pytest.raises(SurveyError, match=sentence) as caught:
        read_mgd77t(written(tmp_path, *rows))
    assert "\n" not in str(caught.value)


def test_several_mistakes_are_told_at_once_up_to_ten(tmp_path):
    with pytest.raises(SurveyError, match="row 2, LAT") as caught:
        read_mgd77t(written(tmp_path, record(LON="east"), record(LAT="x"), record(TIME="9999"), *[record(LAT="y")] * 9))
    assert len(caught.value.sentences) == 10


def test_a_cut_gzip_file_and_a_bomb_are_refused(tmp_path):
    packed = gzip.compress(("\n".join([RECORD] * 500)).encode())
    (tmp_path / "cut.gz").write_bytes(packed[:-20])
    with pytest.raises(SurveyError, match="must be a whole gzip file"):
        read_mgd77t(tmp_path / "cut.gz")
    (tmp_path / "bomb.gz").write_bytes(gzip.compress(b" " * 30_000_000))
    with pytest.raises(SurveyError, match="must unpack to under"):
        read_mgd77t(tmp_path / "bomb.gz")


# -- real files ------------------------------------------------------------------------------------------------------

# Readings of the magnetometer: NBP9908's as in the data center's inventory of the open data beside the repository.
READINGS = {"nbp9908": 28006, "rc2107": 6815, "elt03": 1535}


@pytest.mark.parametrize("survey", READINGS)
def test_every_record_of_a_real_file_is_read_as_plain_splitting_reads_it(shared, survey):
    path = shared / "trackline" / f"{survey}.m77t"
    table, counts = read_mgd77t(path)
    rows = [line.split("\t") + [""] * 30 for line in path.read_text().splitlines()[1:]]
    expected = []
    for number, cells in enumerate(rows, start=2):
        zone, date, time = float(cells[1]), cells[2], float(cells[3])
        minutes = 60 * (time // 100 + zone) + time % 100
        instant = pd.Timestamp(f"{date[:4]}-{date[4:6]}-{date[6:]}") + pd.Timedelta(round(60 * minutes), "s")
        wanted = (float(cells[k]) if cells[k] else np.nan for k in (4, 5, 13, 15, 18, 9))
        expected.append((instant, *wanted, number))
    expected = pd.DataFrame(expected, columns=table.columns).sort_values("time_utc", kind="stable", ignore_index=True)
    pd.testing.assert_frame_equal(table, expected, check_dtype=False)
    assert table["total_field_nt"].notna().sum() == READINGS[survey]
    assert counts["records"] == len(rows) == len(table)
    assert counts["heading"] == 1


@pytest.mark.parametrize("survey", READINGS)
def test_ten_degree_codes_and_box_agree_with_the_real_header(shared, survey):
    header = read_header(shared / "trackline" / f"{survey}.h77t")
    table, _ = read_mgd77t(shared / "trackline" / f"{survey}.m77t")
    lat, lon = table["latitude_deg"].to_numpy(), table["longitude_deg"].to_numpy()
    assert header["IDS_10DEG"] == ",".join([*ten_degree_codes(lat, lon), "9999"])
    ours = table.rename(columns={"latitude_deg": "sensor_latitude_deg", "longitude_deg": "sensor_longitude_deg"})
    names, cells = as_header(ours, survey.upper()).decode().splitlines()
    own = dict(zip(names.split("\t"), cells.split("\t"), strict=False))
    assert own["IDS_10_NUM"] == header["IDS_10_NUM"]
    box = ["LAT_TOP", "LAT_BOTTOM", "LON_LEFT", "LON_RIGHT"]
    if survey == "rc2107":  # its header's box does not hold its own westernmost and easternmost record
        box = box[:2]
    assert [own[name] for name in box] == [header[name] for name in box]
    assert names == "\t".join(header)


@pytest.mark.parametrize("survey", READINGS)
def test_a_real_file_written_anew_reads_back_the_same(shared, tmp_path, survey):
    table, _ = read_mgd77t(shared / "trackline" / f"{survey}.m77t")
    ours = table.rename(columns={"latitude_deg": "sensor_latitude_deg", "longitude_deg": "sensor_longitude_deg"})
    (tmp_path / "x.m77t").write_bytes(as_mgd77t(ours.assign(anomaly_nt=ours["mag_residual_nt"]), survey.upper()))
    again, _ = read_mgd77t(tmp_path / "x.m77t")
    pd.testing.assert_frame_equal(again.drop(columns="source_row"), table.drop(columns="source_row"))


# -- writing ---------------------------------------------------------------------------------------------------------


@pytest.fixture
def corrected():
    rng = np.random.default_rng(5)
    n = 3000
    time = np.datetime64("2024-02-28T23:30:00.000", "ns") + np.cumsum(rng.integers(1, 3000, n)) * np.timedelta64(
        1, "ms"
    )
    diurnal = rng.normal(0, 30, n)
    diurnal[:500] = np.nan
    main, heading, level = rng.uniform(44000, 45000, n), rng.normal(0, 3, n), 2.5
    total = np.round(main + np.nan_to_num(diurnal) + heading + level + rng.normal(0, 100, n), 3)
    total[700:720] = np.nan
    flags = np.zeros(n, np.uint32)
    flags[[10, 800]] = int(Flag.SPIKE)
    flags[801] = int(Flag.SPIKE | Flag.EDITED_IN)
    anomaly = total - main - diurnal - heading - level
    anomaly[[10, 800]] = np.nan
    return pd.DataFrame(
        {
            "time_utc": time,
            "sensor_latitude_deg": np.linspace(-0.01, 0.01, n),
            "sensor_longitude_deg": (np.linspace(179.9, 180.1, n) + 180) % 360 - 180,
            "total_field_nt": total,
            "main_field_nt": main,
            "diurnal_nt": diurnal,
            "anomaly_nt": anomaly,
            "sensor_depth_m": np.full(n, 7.4),
            "water_depth_m": np.where(np.arange(n) % 5, np.nan, 4000.0),
            "flags": flags,
            "line": np.where(np.arange(n) < 50, None, "Línea 7\tünd \n 8"),
        }
    )


def test_written_readings_read_back_to_the_same_values(tmp_path, corrected, monkeypatch):
    monkeypatch.setattr(mgd77t, "PIECE", 1000)
    (tmp_path / "x.m77t").write_bytes(as_mgd77t(corrected.sample(frac=1, random_state=1), "X1"))
    table, counts = read_mgd77t(tmp_path / "x.m77t")
    assert (table["time_utc"] == corrected["time_utc"]).all()
    np.testing.assert_array_equal(table["total_field_nt"], corrected["total_field_nt"])  # observed, to the digit
    np.testing.assert_allclose(table["mag_residual_nt"], corrected["anomaly_nt"], atol=5.1e-5)
    for name in ("latitude_deg", "longitude_deg"):
        np.testing.assert_allclose(table[name], corrected[f"sensor_{name}"], atol=1.0e-6)
    np.testing.assert_array_equal(table["water_depth_m"], corrected["water_depth_m"])
    assert counts["corrected"] == 3000 - 500 - 20
    assert counts["backwards"] == 0


def test_written_records_keep_the_field_rules(corrected):
    text = as_mgd77t(corrected, "X1").decode("ascii")
    lines = text.split("\n")
    assert text.endswith("\n")
    assert lines[0] == HEADING
    assert len(lines) == 3000 + 2
    limits = {"TIME": (0, 2360), "LAT": (-90, 90), "LON": (-180, 180), "POS_TYPE": (1, 3), "MAG_QUALCO": (1, 6)}
    for line in lines[1:-1]:
        cells = line.split("\t")
        assert len(cells) <= 26
        assert line == line.rstrip("\t ")  # trailing tabs omitted, no blanks at the end
        assert all(cell == cell.strip() for cell in cells)
        known = dict(zip(mgd77t.DATA_FIELDS, cells, strict=False))
        assert all("e" not in known.get(name, "") for name in mgd77t.READ)  # explicit decimal points
        for name, (low, high) in limits.items():
            if known.get(name):
                assert low <= float(known[name]) <= high
        assert "-0" not in cells
    named = [dict(zip(mgd77t.DATA_FIELDS, line.split("\t"), strict=False)) for line in lines[1:-1]]
    assert "MAG_DICORR" not in {name for name, cell in named[10].items() if cell}  # nil: not corrected
    assert (named[800]["MAG_QUALCO"], named[801]["MAG_QUALCO"], named[0]["MAG_QUALCO"]) == ("5", "1", "1")
    assert (named[800]["MAG_RES"], named[700]["MAG_TOT"], named[700]["MAG_QUALCO"]) == ("", "", "")
    assert (named[900]["MAG_SDEPTH"], named[900]["LINEID"], named[900]["TIMEZONE"]) == ("7", "Linea 7 und 8", "0")
    one = corrected.iloc[900]
    assert float(named[900]["MAG_TOT"]) == pytest.approx(one["total_field_nt"] - one["diurnal_nt"], abs=1e-4)
    assert float(named[900]["MAG_DICORR"]) == pytest.approx(-one["diurnal_nt"], abs=1e-4)


def test_the_header_names_the_reference_field_and_the_extent(tmp_path, corrected):
    given = {"INST_SRC": "An\tInstitute", "PLATFORM": "R/V Example", "ADD_DOC": "Two\nlines."}
    (tmp_path / "x.h77t").write_bytes(as_header(corrected, "X1", given))
    header = read_header(tmp_path / "x.h77t")
    # the list of codes ends with 18, IGRF-11: later generations go by 88, other, and their name
    assert (header["M_REFFL_CO"], header["MAG_REFFLD"]) == ("88", "IGRF-14")
    assert (header["FORMAT_77"], header["PARAMS_CO"], header["SURVEY_ID"]) == ("MGD77T", "55000", "X1")
    assert (header["LON_LEFT"], header["LON_RIGHT"]) == ("179.90", "-179.90")
    assert (header["IDS_10_NUM"], header["IDS_10DEG"]) == ("2", "3017,7017,9999")  # SE to NW
    assert (header["DATE_DEP"], header["DATE_ARR"]) == ("20240228", "20240229")
    assert (header["INST_SRC"], header["PLATFORM"]) == ("An Institute", "R/V Example")
    assert header["ADD_DOC"].startswith("Two lines. LAT and LON are of the towed magnetic sensor.")


def test_an_empty_survey_and_an_unknown_field():
    empty = pd.DataFrame({"time_utc": np.zeros(0, "datetime64[ns]"), "total_field_nt": np.zeros(0)})
    assert as_mgd77t(empty, "X1").decode() == HEADING + "\n"
    assert b"\tMGD77T\t" in as_header(empty, "X1")
    with pytest.raises(KeyError, match="SHIP"):
        as_header(empty, "X1", {"SHIP": "x"})


@pytest.mark.parametrize(
    ("lat", "lon", "code"),
    [
        # examples in the documentation
        (-(37 + 48 / 60), 4 + 13 / 60, "3300"),
        (-21.6, -14.3, "5201"),
        (34 + 28 / 60, -(143 + 27 / 60), "7314"),
        (75.0, 43.0, "1704"),
        # edges
        (0.0, 0.0, "1000"),
        (-0.1, 180.0, "5017"),
        (90.0, -180.0, "7817"),
        (-90.0, 179.9, "3817"),
        (10.0, -10.0, "7101"),
    ],
)
def test_ten_degree_codes(lat, lon, code):
    assert ten_degree_codes(np.array([lat]), np.array([lon])) == [code]


def test_longitude_span_is_the_shortest_arc():
    assert longitude_span(np.array([170.0, -170.0, 180.0])) == (170.0, -170.0)
    assert longitude_span(np.array([-10.0, 20.0])) == (-10.0, 20.0)
    assert longitude_span(np.array([5.0])) == (5.0, 5.0)


@pytest.mark.parametrize(
    ("rows", "sentence"),
    [
        ([RECORD], r"row 1, FORMAT_77: must be MGD77T\. Got X1 0\. Is it a data file\?"),
        (["X1\tMGD77T", "X2\tMGD77T"], r"must hold one MGD77T header record\. Got 2\."),
        (["X1\tFORMAT_77"], r"must hold one MGD77T header record\. Got 0\."),
        (["X1\tMGD77T" + "\tx" * 60], r"row 1: must have 58 fields\. Got 62\."),
    ],
)
def test_a_mistake_in_a_header_is_one_sentence(tmp_path, rows, sentence):
    with pytest.raises(SurveyError, match=sentence):
        read_header(written(tmp_path, *rows, name="x.h77t"))
