"""NMEA 0183: against pynmea2 sentence by sentence, on real logs, and case by case."""

from functools import reduce

import numpy as np
import pynmea2
import pytest

from steps.errors import SurveyError
from steps.formats.nmea import parse_nmea, read_nmea

LOGS = ["NBP1406_gyr1-2014-08-01", "NBP1406_s330-2014-08-01", "NBP1406_seap-2014-08-01"]


def sentence(body):
    """Put $ and checksum about the body of a sentence (exclusive-or of its characters, NMEA 0183)."""
    return f"${body}*{reduce(lambda a, b: a ^ b, body.encode()):02X}"


def parse(*lines, **options):
    return parse_nmea("\r\n".join(lines).encode() + b"\r\n", **options)


ZDA = sentence("GPZDA,235958.00,31,12,2023,00,00")
GGA = "GPGGA,{},3112.5000,S,17959.9000,W,1,09,0.9,12.0,M,-3.1,M,,"


@pytest.mark.parametrize("name", LOGS)
def test_real_log_agrees_with_pynmea2(shared, name):
    """Every line of the real logs is accounted for; values as pynmea2 has them."""
    path = shared / "nmea" / name
    log = read_nmea(path)
    kinds = {"GGA": [], "HDT": [], "VTG": []}
    lines = path.read_text().splitlines()
    skipped = 0
    for line in lines:
        message = pynmea2.parse(line.split(" ", 1)[1], check=True)
        kind = getattr(message, "sentence_type", "")
        if kind in kinds:
            kinds[kind].append(message)
        else:
            skipped += kind == ""
    assert log.counts["lines"] == len(lines) == sum(log.counts.values()) - log.counts["lines"]
    assert log.counts.get("proprietary", 0) == skipped
    assert "wrong checksum" not in log.counts
    assert len(log.headings) == len(kinds["HDT"])
    np.testing.assert_array_equal(log.headings["heading_deg"], [float(m.heading) for m in kinds["HDT"]])
    assert len(log.fixes) == len(kinds["GGA"])
    np.testing.assert_allclose(log.fixes["latitude_deg"], [m.latitude for m in kinds["GGA"]], rtol=0, atol=1e-11)
    np.testing.assert_allclose(log.fixes["longitude_deg"], [m.longitude for m in kinds["GGA"]], rtol=0, atol=1e-11)
    of_day = [
        t.hour * 3600 + t.minute * 60 + t.second + t.microsecond / 1e6 for t in (m.timestamp for m in kinds["GGA"])
    ]
    seconds = (log.fixes["time_utc"].to_numpy() - np.datetime64("2014-08-01")) / np.timedelta64(1, "s")
    np.testing.assert_allclose(seconds, of_day, rtol=0, atol=1e-6)


def test_wrong_checksums_are_those_that_pynmea2_rejects(shared):
    rng = np.random.default_rng(5)
    raw = bytearray((shared / "nmea" / LOGS[1]).read_bytes())
    for place in rng.integers(0, len(raw), 400):
        if raw[place] not in b"\r\n$*" and 33 < raw[place] < 90:
            raw[place] ^= 1
    log = parse_nmea(bytes(raw))
    rejected = 0
    for line in bytes(raw).decode("ascii").splitlines():
        try:
            pynmea2.parse(line[line.index("$") :], check=True)
        except pynmea2.ChecksumError:
            rejected += 1
        except pynmea2.ParseError as error:
            rejected += "parse data" in str(error)  # checksum digits that are no hexadecimal ones
    assert log.counts["wrong checksum"] == rejected > 100


def test_midnight_and_the_year_s_end_without_a_date_in_the_fix():
    log = parse(ZDA, *(sentence(GGA.format(t)) for t in ("235959.00", "000000.00", "000001.00")))
    wanted = ["2023-12-31T23:59:59", "2024-01-01T00:00:00", "2024-01-01T00:00:01"]
    assert (log.fixes["time_utc"].to_numpy() == np.array(wanted, "datetime64[ns]")).all()


def test_a_fix_before_the_first_date_has_that_date():
    log = parse(sentence(GGA.format("235957.00")), ZDA)
    assert log.fixes["time_utc"][0] == np.datetime64("2023-12-31T23:59:57")


def test_hemispheres_and_a_talker_of_any_kind():
    log = parse(ZDA, sentence("INGLL,4530.0000,N,00130.0000,E,235959,A,A"))
    assert log.fixes[["latitude_deg", "longitude_deg"]].to_numpy().tolist() == [[45.5, 1.5]]
    log = parse(ZDA, sentence(GGA.format("235959.00")))
    np.testing.assert_allclose(log.fixes.loc[0, "latitude_deg"], -31 - 12.5 / 60)
    np.testing.assert_allclose(log.fixes.loc[0, "longitude_deg"], -179 - 59.9 / 60)


def test_one_fix_an_epoch_with_the_course_and_speed_of_rmc_or_vtg():
    log = parse(
        ZDA,
        sentence(GGA.format("235959.00")),
        sentence("GPRMC,235959.00,A,3112.5000,S,17959.9000,W,9.1,215.11,311223,,,A"),
        sentence("GPVTG,100.0,T,,M,20.0,N,37.0,K,A"),
        sentence("GPGLL,3112.5000,S,17959.9000,W,235959.00,A,A"),
    )
    assert len(log.fixes) == 1
    assert log.fixes.loc[0, "course_deg"] == 215.11
    np.testing.assert_allclose(log.fixes.loc[0, "speed_mps"], 9.1 * 1852 / 3600)  # a knot is 1852 m an hour


def test_vtg_belongs_to_the_fix_before_it():
    log = parse(
        ZDA,
        sentence(GGA.format("235958.00")),
        sentence("GPVTG,90.0,T,,M,,N,18.0,K,A"),
        sentence(GGA.format("235959.00")),
    )
    assert log.fixes["course_deg"].tolist()[0] == 90.0
    np.testing.assert_allclose(log.fixes["speed_mps"][0], 5.0)
    assert np.isnan(log.fixes["course_deg"][1])


def test_no_checksum_is_accepted_and_a_wrong_one_is_not():
    good = sentence(GGA.format("235959.00"))
    log = parse(ZDA, good.split("*")[0], good[:-2] + "00")
    assert len(log.fixes) == 1
    assert log.counts["wrong checksum"] == 1


@pytest.mark.parametrize(
    "change",
    [
        (",1,09", ",0,09"),  # no fix
        ("3112.5000", "3160.0000"),  # sixty minutes
        ("3112.5000", "9912.5000"),
        (",S,", ",,"),
        ("3112.5000", ""),
        ("235959.00", ""),
        ("235959.00", "245959.00"),
    ],
)
def test_a_fix_without_value_is_counted_not_used(change):
    log = parse(ZDA, sentence(GGA.format("235959.00").replace(*change)))
    assert len(log.fixes) == 0
    assert log.counts["GGA without value"] == 1


def test_headings_take_the_logger_s_stamp_or_the_last_time():
    log = parse(
        "2023-12-31T23:59:58.250000Z " + ZDA,
        "2023-12-31T23:59:58.750000Z " + sentence("HEHDT,359.9,T"),
        sentence("HEHDT,0.1,T"),
    )
    times = np.array(["2023-12-31T23:59:58.75", "2023-12-31T23:59:58"], "datetime64[ns]")
    assert (log.headings["time_utc"].to_numpy() == times).all()


def test_stamps_date_a_log_without_zda():
    log = parse(
        "2024-03-01T00:00:01.100Z " + sentence(GGA.format("235959.00")),
        "2024-03-01 00:00:02\t" + sentence(GGA.format("000001.00")),
    )
    assert (
        log.fixes["time_utc"].to_numpy() == np.array(["2024-02-29T23:59:59", "2024-03-01T00:00:01"], "datetime64[ns]")
    ).all()


def test_the_logger_s_stamp_may_be_the_time():
    log = parse("2024-03-01T00:00:01.5Z " + sentence(GGA.format("000000.00")), stamp="logger")
    assert log.fixes["time_utc"][0] == np.datetime64("2024-03-01T00:00:01.5")


def test_every_odd_line_is_counted():
    log = parse(ZDA, "", "noise", "$GP", sentence("PSXN,20,1"), sentence("GPGSV,1,1,00"), "$$$", sentence("GPGGA"))
    counts = {key: value for key, value in log.counts.items() if key != "lines"}
    assert sum(counts.values()) == log.counts["lines"] == 8
    assert counts["blank"] == 1
    assert counts["no sentence"] == 1
    assert counts["proprietary"] == 1
    assert counts["other sentence"] == 1


def test_positions_without_any_date_are_refused():
    with pytest.raises(SurveyError, match="must give a date: by ZDA, RMC or the logger's stamp"):
        parse(sentence(GGA.format("235959.00")))


def test_an_empty_file_is_refused(tmp_path):
    (tmp_path / "a.nmea").write_bytes(b"\n \n")
    with pytest.raises(SurveyError, match="must hold NMEA 0183 sentences. Got an empty file"):
        read_nmea(tmp_path / "a.nmea")
