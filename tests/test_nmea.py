"""NMEA 0183: against pynmea2 sentence by sentence, on real logs and on broken ones, and case by case."""

import gzip
from functools import reduce

import numpy as np
import pynmea2
import pytest
from hypothesis import example, given, settings
from hypothesis import strategies as st

from steps.errors import SurveyError
from steps.formats import nmea, sentences
from steps.formats.nmea import parse_nmea, read_nmea

FIELDS = {"GGA": 14, "RMC": 9, "GLL": 4, "VTG": 8, "ZDA": 4, "HDT": 2}  # fewest of any version (NMEA 0183, from memory)
LOGS = ["NBP1406_gyr1-2014-08-01", "NBP1406_s330-2014-08-01", "NBP1406_seap-2014-08-01"]


def sentence(body):
    """Put $ and checksum about the body of a sentence (exclusive-or of its characters, NMEA 0183)."""
    return f"${body}*{reduce(lambda a, b: a ^ b, body.encode()):02X}"


def parse(*lines, **options):
    return parse_nmea("\r\n".join(lines).encode() + b"\r\n", **options)


def times(*texts):
    return np.array(texts, "datetime64[ns]")


def balanced(log):
    return log.counts["lines"] == sum(number for name, number in log.counts.items() if name != "lines")


ZDA = sentence("GPZDA,235958.00,31,12,2023,00,00")
GGA = "GPGGA,{},3112.5000,S,17959.9000,W,1,09,0.9,12.0,M,-3.1,M,,"
RMC = "GPRMC,{},A,3112.5000,S,17959.9000,W,9.1,215.11,{},,,A"


# -- outside checks --------------------------------------------------------------------------------------------------


def by_pynmea2(lines):
    """Read lines one by one with pynmea2: messages of the kinds that are used, by kind, and how many are rejected."""
    messages, rejected = {kind: [] for kind in sentences.KINDS}, 0
    for line in lines:
        try:
            message = pynmea2.parse(line[line.index("$") :], check=False)
        except pynmea2.SentenceTypeError:
            continue
        except pynmea2.ParseError:  # ChecksumError is one
            rejected += 1
            continue
        kind = getattr(message, "sentence_type", "")
        if kind in messages and len(message.data) < FIELDS[kind]:
            rejected += 1  # pynmea2 does not count fields
        elif kind in messages:
            messages[kind].append(message)
    return messages, rejected


def seconds_of_day(message):
    t = message.timestamp
    return t.hour * 3600 + t.minute * 60 + t.second + t.microsecond / 1e6


@pytest.mark.parametrize("name", LOGS)
def test_every_line_of_a_real_log_is_read_as_pynmea2_reads_it(shared, name):
    path = shared / "nmea" / name
    log = read_nmea(path)
    messages, rejected = by_pynmea2(path.read_text().splitlines())
    assert rejected == 0  # the folder's README: all checksums good
    assert balanced(log)
    assert log.counts["lines"] == len(path.read_text().splitlines())
    for kind, found in messages.items():
        assert log.counts.get(kind, 0) == len(found), kind
    assert log.counts.get("skipped PSXN", 0) == log.counts["lines"] - sum(map(len, messages.values()))
    assert log.notes == []

    # the same float64, to the last bit
    assert log.headings["heading_deg"].tolist() == [float(m.heading) for m in messages["HDT"]]
    assert log.fixes["latitude_deg"].tolist() == [m.latitude for m in messages["GGA"]]
    assert log.fixes["longitude_deg"].tolist() == [m.longitude for m in messages["GGA"]]
    seconds = (log.fixes["time_utc"].to_numpy() - np.datetime64("2014-08-01")) / np.timedelta64(1, "s")
    np.testing.assert_allclose(seconds, [seconds_of_day(m) for m in messages["GGA"]], rtol=0, atol=1e-6)
    # in these logs the VTG of an epoch follows its GGA; the last one may be cut off
    told = log.fixes["course_deg"].to_numpy()[: len(messages["VTG"])]
    assert told.tolist() == [float(m.true_track) for m in messages["VTG"]]
    knots = [float(m.spd_over_grnd_kts) * 1852 / 3600 for m in messages["VTG"]]
    np.testing.assert_allclose(log.fixes["speed_mps"].to_numpy()[: len(knots)], knots, rtol=1e-15)


@pytest.mark.parametrize("seed", range(5))
def test_broken_sentences_are_rejected_where_pynmea2_rejects_them(shared, seed):
    """Characters of a real log changed at random, one in about 150."""
    rng = np.random.default_rng(seed)
    raw = bytearray((shared / "nmea" / LOGS[1]).read_bytes())
    for place in rng.integers(0, len(raw), 2300):
        if raw[place] not in b"\r\n$*" and raw[max(place - 28, 0) : place].rfind(b"\n") < 0:  # behind the stamp
            raw[place] = rng.choice(bytearray(b"0123456789ABCDEFZ,.NSWTMKx"))
    lines = bytes(raw).decode().splitlines()
    log = parse_nmea(bytes(raw))
    messages, rejected = by_pynmea2(lines)
    assert balanced(log)
    assert log.counts["wrong checksum"] + log.counts.get("malformed", 0) == rejected > 500
    for kind, found in messages.items():
        own = sum(number for name, number in log.counts.items() if name.split()[0] == kind)
        assert own == len(found), kind


@pytest.mark.parametrize("size", [2, 64, 1000, 10**9])
def test_blocks_do_not_matter(shared, monkeypatch, size):
    data = (shared / "nmea" / LOGS[1]).read_bytes()[:20_000]
    whole = parse_nmea(data)
    monkeypatch.setattr(sentences, "BLOCK_BYTES", size)
    cut = parse_nmea(data)
    assert cut.counts == whole.counts
    assert cut.fixes.equals(whole.fixes)
    assert cut.headings.equals(whole.headings)


# -- times -----------------------------------------------------------------------------------------------------------


def test_midnight_and_the_year_s_end_without_a_date_in_the_fix():
    log = parse(ZDA, *(sentence(GGA.format(t)) for t in ("235959.00", "000000.00", "000001.00")))
    wanted = times("2023-12-31T23:59:59", "2024-01-01T00:00:00", "2024-01-01T00:00:01")
    assert (log.fixes["time_utc"].to_numpy() == wanted).all()


def test_days_are_counted_where_only_the_first_sentence_has_a_date():
    hours = [f"{hour % 24:02d}0000.00" for hour in range(6, 80, 5)]
    log = parse(sentence("GPZDA,050000,28,02,2024,00,00"), *(sentence(GGA.format(t)) for t in hours))
    wanted = np.datetime64("2024-02-28", "ns") + np.arange(6, 80, 5) * np.timedelta64(1, "h")
    assert (log.fixes["time_utc"].to_numpy() == wanted).all()


def test_fixes_before_the_first_date_are_counted_back():
    log = parse(sentence(GGA.format("235957.00")), sentence("GPZDA,000003.00,01,01,2024,00,00"))
    assert log.fixes["time_utc"].tolist() == [np.datetime64("2023-12-31T23:59:57", "ns")]


def test_a_fix_out_of_order_at_midnight_keeps_its_own_day():
    log = parse(ZDA, *(sentence(GGA.format(t)) for t in ("000000.00", "235959.00", "000001.00")))
    wanted = times("2024-01-01T00:00:00", "2023-12-31T23:59:59", "2024-01-01T00:00:01")
    assert (log.fixes["time_utc"].to_numpy() == wanted).all()
    assert log.notes == ["the time of the fixes goes back 1 times, first in row 3; they are put in order."]


def test_a_leap_second_is_the_next_midnight():
    """IERS Bulletin C 52: a leap second at the end of 2016."""
    log = parse(sentence(RMC.format("235960.00", "311216")), sentence(RMC.format("000000.00", "010117")))
    assert log.fixes["time_utc"].tolist() == [np.datetime64("2017-01-01", "ns")]


def test_the_date_of_a_receiver_without_fix_is_not_used():
    void = RMC.format("235950.00", "060180").replace(",A,", ",V,", 1)
    log = parse(sentence(void), sentence(RMC.format("235958.00", "311223")), sentence(GGA.format("235959.00")))
    assert (log.fixes["time_utc"].to_numpy() == times("2023-12-31T23:59:58", "2023-12-31T23:59:59")).all()
    assert log.counts["RMC without fix"] == 1


def test_stamps_date_a_log_without_zda_whatever_the_logger_puts_between():
    log = parse(
        "2024-03-01T00:00:01.100Z " + sentence(GGA.format("235959.00")),
        "2024-03-01 00:00:02\t" + sentence(GGA.format("000001.00")),
        "2024-03-01T00:00:03.250000+00:00," + sentence(GGA.format("000002.00")),
        "2024-03-01T02:00:04,5+0200 , " + sentence(GGA.format("000003.00")),
    )
    wanted = times("2024-02-29T23:59:59", "2024-03-01T00:00:01", "2024-03-01T00:00:02", "2024-03-01T00:00:03")
    assert (log.fixes["time_utc"].to_numpy() == wanted).all()


@pytest.mark.parametrize(
    ("stamp", "means"),
    [
        ("2024-02-29T23:59:59.123456789Z ", "2024-02-29T23:59:59.123456789"),
        ("2024-03-01T01:29:59.5+01:30 ", "2024-02-29T23:59:59.5"),
        ("2024-02-29 18:59:59-05:00\t", "2024-02-29T23:59:59"),
        ("2024-02-29T23:59:60Z,", "2024-03-01T00:00:00"),
    ],
)
def test_the_logger_s_stamp_may_be_the_time(stamp, means):
    log = parse(stamp + sentence(GGA.format("120000.00")), stamp="logger")
    assert (log.fixes["time_utc"].to_numpy() == times(means)).all()


def test_with_stamps_for_times_an_epoch_is_still_one_fix():
    log = parse(
        "2024-03-01T00:00:01.3Z " + sentence(GGA.format("000000.00")),
        "2024-03-01T00:00:01.5Z " + sentence(RMC.format("000000.00", "010324")),
        sentence(GGA.format("000001.00")),
        stamp="logger",
    )
    assert (log.fixes["time_utc"].to_numpy() == times("2024-03-01T00:00:01.3")).all()
    assert log.fixes["course_deg"].tolist() == [215.11]
    assert log.counts["GGA without stamp"] == 1


def test_headings_take_the_logger_s_stamp_or_the_last_time():
    log = parse(
        sentence("HEHDT,77.0,T"),
        "2023-12-31T23:59:58.250000Z " + ZDA,
        "2023-12-31T23:59:58.750000Z " + sentence("HEHDT,359.9,T"),
        sentence("HEHDT,0.1,T"),
    )
    assert (log.headings["time_utc"].to_numpy() == times("2023-12-31T23:59:58.75", "2023-12-31T23:59:58")).all()
    assert log.headings["heading_deg"].tolist() == [359.9, 0.1]
    assert log.counts["HDT without time"] == 1


def test_headings_follow_the_sentences_where_the_logger_s_clock_is_wrong():
    lines = [f"2024-03-01T02:00:{s + 7:02d}Z {sentence(RMC.format(f'0000{s:02d}.00', '010324'))}" for s in range(5)]
    log = parse(*lines, "2024-03-01T02:00:12.5Z " + sentence("HEHDT,90.0,T"))
    assert (log.headings["time_utc"].to_numpy() == times("2024-03-01T00:00:05.5")).all()
    assert log.notes == [
        "the logger's stamps are 7207.0 s ahead of the sentences' own times; headings, which have only stamps, are "
        "placed by that difference."
    ]


def test_a_week_rollover_is_suspected():
    """GPS weeks are counted modulo 1024 (IS-GPS-200, 20.3.3.3.1.1): 2019-04-07 falls back to 1999-08-22."""
    log = parse("2019-04-07T00:00:01Z " + sentence(RMC.format("000001.00", "220899")))
    assert log.fixes["time_utc"].tolist() == [np.datetime64("1999-08-22T00:00:01", "ns")]
    assert "the dates of ZDA or RMC are 1024 weeks from the logger's stamps" in log.notes[0]


def test_after_a_long_silence_the_stamp_says_the_day():
    log = parse(
        "2024-03-01T00:00:00Z " + sentence(RMC.format("000000.00", "010324")),
        "2024-03-03T12:30:00Z " + sentence(GGA.format("123000.00")),
    )
    assert (log.fixes["time_utc"].to_numpy() == times("2024-03-01", "2024-03-03T12:30")).all()


# -- what the sentences say ------------------------------------------------------------------------------------------


@pytest.mark.parametrize("talker", ["GP", "GN", "GL", "IN", "HE", "II", "G1"])
def test_any_talker_is_heard(talker):
    log = parse(ZDA, sentence(talker + "GLL,4530.0000,N,00130.0000,E,235959,A,A"))
    assert log.fixes[["latitude_deg", "longitude_deg"]].to_numpy().tolist() == [[45.5, 1.5]]


def test_hemispheres_and_the_date_line():
    log = parse(ZDA, sentence(GGA.format("235959.00")), sentence("GPGLL,0000.0000,N,18000.0000,E,235960,A"))
    np.testing.assert_allclose(log.fixes["latitude_deg"], [-31 - 12.5 / 60, 0.0])
    np.testing.assert_allclose(log.fixes["longitude_deg"], [-179 - 59.9 / 60, -180.0])


def test_one_fix_an_epoch_with_the_course_and_speed_of_rmc_or_vtg():
    log = parse(
        ZDA,
        sentence("GPGLL,3112.0000,S,17959.0000,W,235959.00,A,A"),
        sentence(RMC.format("235959.00", "311223").replace("12.5", "12.4")),
        sentence("GPVTG,100.0,T,,M,20.0,N,37.0,K,A"),
        sentence(GGA.format("235959.00")),
    )
    assert len(log.fixes) == 1
    assert log.fixes.loc[0, "latitude_deg"] == -31 - 12.5 / 60  # GGA is preferred
    assert log.fixes.loc[0, "source_row"] == 5
    assert log.fixes.loc[0, "course_deg"] == 215.11
    np.testing.assert_allclose(log.fixes.loc[0, "speed_mps"], 9.1 * 1852 / 3600)  # a knot is 1852 m an hour
    assert balanced(log)


def test_vtg_belongs_to_the_fix_before_it():
    log = parse(
        ZDA,
        sentence("GPVTG,80.0,T,,M,,N,18.0,K,A"),
        sentence(GGA.format("235958.00")),
        sentence("GPVTG,90.0,T,,M,,N,18.0,K,A"),
        sentence("GPVTG,91.0,T,,M,,N,19.0,K,A"),
        sentence(GGA.format("235959.00")),
        sentence("GPVTG,92.0,T,,M,,N,19.0,K,N"),
    )
    assert log.fixes["course_deg"].tolist()[0] == 90.0
    np.testing.assert_allclose(log.fixes["speed_mps"][0], 5.0)
    assert np.isnan(log.fixes["course_deg"][1])
    assert log.counts["VTG without value"] == 1


def test_a_fix_of_rmc_stands_where_gga_has_none():
    void = GGA.format("235959.00").replace(",1,09", ",0,09")
    log = parse(sentence(void), sentence(RMC.format("235959.00", "311223")))
    assert log.fixes["source_row"].tolist() == [2]
    assert log.counts["GGA without fix"] == 1


@pytest.mark.parametrize(
    ("change", "reason"),
    [
        ((",1,09", ",0,09"), "without fix"),
        ((",1,09", ",7,09"), "without fix"),  # manual input
        ((",1,09", ",8,09"), "without fix"),  # simulator
        ((",1,09", ",,09"), "without fix"),
        (("3112.5000", "3160.0000"), "without value"),  # sixty minutes
        (("3112.5000", "9912.5000"), "without value"),
        (("17959.9000", "18000.0001"), "without value"),
        (("3112.5000", "312.5000"), "without value"),  # a digit lost
        (("3112.5000", "31I2.5000"), "without value"),
        (("3112.5000", "3112.50.00"), "without value"),
        (("3112.5000", "-3112.500"), "without value"),
        (("3112.5000", "0" * 20), "without value"),
        ((",S,", ",,"), "without value"),
        ((",S,", ",E,"), "without value"),
        (("3112.5000", ""), "without value"),
        (("235959.00", ""), "without value"),
        (("235959.00", "245959.00"), "without value"),
        (("235959.00", "125960.00"), "without value"),
        (("235959.00", "2359"), "without value"),
    ],
)
def test_a_fix_that_says_nothing_is_counted_not_used(change, reason):
    assert change[0] in GGA.format("235959.00")
    log = parse(ZDA, sentence(GGA.format("235959.00").replace(*change)))
    assert len(log.fixes) == 0
    assert log.counts[f"GGA {reason}"] == 1
    assert balanced(log)


@pytest.mark.parametrize(
    "body",
    [
        "GPRMC,235959.00,V,3112.5000,S,17959.9000,W,9.1,215.11,311223,,,A",
        "GPRMC,235959.00,A,3112.5000,S,17959.9000,W,9.1,215.11,311223,,,N",
        "GPRMC,235959.00,A,3112.5000,S,17959.9000,W,9.1,215.11,311223,,,S",
        "GPGLL,3112.5000,S,17959.9000,W,235959,V",
        "GPGLL,3112.5000,S,17959.9000,W,235959,A,N",
    ],
)
def test_a_status_without_fix_is_counted_not_used(body):
    log = parse(ZDA, sentence(body))
    assert len(log.fixes) == 0
    assert log.counts[f"{body[2:5]} without fix"] == 1


@pytest.mark.parametrize("body", ["HEHDT,,T", "HEHDT,360.1,T", "HEHDT,-1.0,T", "HEHDT,12.0,M", "HEHDT,1e2,T"])
def test_a_heading_that_says_nothing_is_counted_not_used(body):
    log = parse(ZDA, sentence(body))
    assert len(log.headings) == 0
    assert log.counts["HDT without value"] == 1


def test_what_deserves_a_look_is_noted():
    log = parse(
        sentence(RMC.format("235958.00", "311223")),
        sentence(GGA.format("235958.00")),
        sentence(GGA.format("235959.00").replace("GP", "IN").replace(",1,09", ",6,09")),
    )
    assert log.notes == [
        "GGA comes from several talkers (GP, IN), whose antennas may stand apart.",
        "1 positions are dead reckoning (GGA quality 6, mode E); they are used.",
    ]


# -- what a line is --------------------------------------------------------------------------------------------------


def test_no_checksum_is_accepted_and_a_wrong_one_is_not():
    good = sentence(GGA.format("235959.00"))
    log = parse(ZDA, good.split("*")[0], good[:-2] + "00", good[:-1], good + "x", good[:-2] + "XY", good.lower()[-3:])
    assert len(log.fixes) == 1
    assert log.counts["wrong checksum"] == 1
    assert log.counts["malformed"] == 3
    assert log.counts["no sentence"] == 1


def test_a_lower_case_checksum_is_a_checksum():
    good = sentence("HEHDT,218.19,T")
    assert good.endswith("*1C")  # as the real log NBP1406 gyr1 has it
    log = parse(ZDA, good[:-2] + "1c")
    assert log.counts["HDT"] == 1


@pytest.mark.parametrize(
    ("line", "name"),
    [
        ("", "blank"),
        ("  \t ", "blank"),
        ("noise", "no sentence"),
        ("2024-03-01T00:00:00Z", "no sentence"),
        ("$GP", "malformed"),
        ("$", "malformed"),
        ("$*00", "malformed"),
        ("$$$", "malformed"),
        ("$gpgga,1,2,3", "malformed"),
        (sentence("GPGGA"), "malformed"),
        (sentence("GPGGA,235959"), "malformed"),  # too few fields
        (GGA.format("235959.00")[:40], "no sentence"),
        ("$" + GGA.format("235959.00")[:40], "malformed"),  # cut short, without a checksum
        ("$" + GGA.format("235959.00") + "$" + GGA.format("235959.00"), "malformed"),  # a line end lost
        ("$" + GGA.format("235959.00").replace("31", "3\x7f1"), "malformed"),
        ("$" + GGA.format("235959.00").replace("31", "3\x011"), "malformed"),
        ("$" + GGA.format("235959.00").replace("31", "3é1"), "malformed"),
        ("$" + GGA.format("235959.00").replace("12.0", "1*2.0"), "malformed"),
        (sentence("PSXN,20,1"), "skipped PSXN"),
        (sentence("GPGSV,1,1,00"), "skipped GSV"),
        (sentence("GPGSV"), "skipped GSV"),
        ("!AIVDM,1,1,,A,14eG;o@034o8sd<L9i:a;WF>062D,0*7D", "skipped VDM"),  # sample sentence of the AIVDM standard
        ("\\s:rx1*2A\\" + sentence("GPGSV,1,1,00"), "skipped GSV"),  # tag block, NMEA 0183 version 4.10
        (sentence("PGGAA,235959,2,3,4,5"), "skipped PGGA"),  # a maker's own, whatever it looks like
    ],
)
def test_every_odd_line_is_counted(line, name):
    log = parse(ZDA, line, line)
    assert log.counts == {"lines": 3, "ZDA": 1, name: 2}


def test_many_kinds_of_skipped_sentence_are_put_together():
    kinds = [f"GP{a}{b}X" for a in "ABCDEFG" for b in "ABCDE"]
    log = parse(ZDA, *(sentence(f"{kind},1") for kind in kinds))
    assert log.counts["skipped other kinds"] == 15
    assert balanced(log)


@pytest.mark.parametrize("end", ["\n", "\r\n", "\r\r\n", "\r", " \n", "\t\r\n" + " " * 20 + "\n"])
def test_line_ends_do_not_matter(end):
    lines = [ZDA, sentence(GGA.format("235959.00")), sentence("HEHDT,90.0,T")]
    log = parse_nmea(end.join(lines).encode())
    assert len(log.fixes) == len(log.headings) == 1
    assert balanced(log)


def test_a_gzipped_log_is_read_as_it_is(tmp_path):
    (tmp_path / "a.gz").write_bytes(gzip.compress(f"{ZDA}\n{sentence(GGA.format('235959.00'))}\n".encode()))
    assert len(read_nmea(tmp_path / "a.gz").fixes) == 1


@pytest.mark.parametrize(
    ("content", "options", "said"),
    [
        (b"", {}, r"must hold NMEA 0183 sentences\. Got an empty file\."),
        (b"\n \n", {}, r"must hold NMEA 0183 sentences\. Got an empty file\."),
        (
            b"time,lat,lon\n1,2,3\n",
            {},
            r"sentences such as \$GPGGA,\.\.\.\. Got time,lat,lon\. Is this the right file\?",
        ),
        (bytes(range(256)) * 50, {}, "must hold NMEA 0183 sentences such as"),
        (
            sentence(GGA.format("235959.00")).encode(),
            {},
            "must give a date: by ZDA, RMC or the logger's stamp. Got none",
        ),
        (
            sentence(RMC.format("235959.00", "311223")).encode(),
            {"stamp": "logger"},
            "must have the logger's time before each sentence. Got none. Leave `stamp` out",
        ),
    ],
)
def test_a_log_without_use_is_refused(content, options, said):
    with pytest.raises(SurveyError, match="^NMEA 0183: .*" + said):
        parse_nmea(content, **options)


# -- rubbish ---------------------------------------------------------------------------------------------------------

_WHOLE = [ZDA, sentence(GGA.format("235959.00")), sentence("HEHDT,90.0,T"), sentence(RMC.format("000000.00", "010124"))]
_PIECES = ["2024-01-01T00:00:00.5Z ", "2024-01-01 00:00:00\t", *"$*,!\n ", "\r\n", "GPVTG,1,T", "\xff"]
_WORDS = st.sampled_from([*_WHOLE, *_PIECES])


@settings(max_examples=300, deadline=None)
@given(st.lists(st.one_of(_WORDS, st.text(max_size=8)), max_size=30))
@example([ZDA, "\n", "$GPGLL,1,N,2,E*"])
@example([ZDA, "\n", "$GPGLL,1,N,2,E"])
def test_no_line_is_lost_and_no_rubbish_stops_the_reader(words):
    data = "".join(words).encode("utf-8", "surrogatepass")
    for stamp in ("sentence", "logger"):
        try:
            log = parse_nmea(data, stamp=stamp)
        except SurveyError:
            continue
        assert balanced(log)
        lines = data if b"\n" in data else data.replace(b"\r", b"\n")
        assert log.counts["lines"] == lines.count(b"\n") + (not lines.endswith(b"\n"))
        assert log.fixes["latitude_deg"].between(-90, 90).all()
        assert log.fixes["longitude_deg"].between(-180, 180, inclusive="left").all()
        assert log.headings["heading_deg"].between(0, 360, inclusive="left").all()
        assert not log.fixes["time_utc"].isna().any()


def test_kinds_are_in_the_order_of_preference():
    assert nmea.KINDS[:3] == ("GGA", "RMC", "GLL")
