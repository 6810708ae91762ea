"""Station files, start times, and the broadcast extension."""

from __future__ import annotations

import struct
from datetime import UTC, datetime
from pathlib import Path

import pytest
from shell_helpers import RATE_HZ

from whistler.clock import decimal_year, iso_time, parse_time, start_time
from whistler.errors import UsageError
from whistler.recording import open_recording, peek_start
from whistler.settings import Settings
from whistler.station import Station, load_station

FULL = """
name = "Skarnmoor"
latitude_deg = 58.2
longitude_deg = -4.1
altitude_m = 120
mains_hz = 60
file_time_pattern = "vlf-%Y%m%d-%H%M%S"
[clock]
offset_s = -0.25
sd_s = 0.01
[ionosphere]
fo_f2_mhz = 4.5
hm_f2_km = 310
scale_height_km = 55
[audio]
channels = ["NS", "EW"]
"""


def station(tmp_path: Path, text: str) -> Station:
    (tmp_path / "s.toml").write_text(text)
    return load_station(tmp_path / "s.toml")


def test_every_key_arrives(tmp_path: Path) -> None:
    """Reference: the file above."""
    assert station(tmp_path, FULL) == Station(
        name="Skarnmoor",
        latitude_deg=58.2,
        longitude_deg=-4.1,
        altitude_m=120,
        mains_hz=60,
        file_time_pattern="vlf-%Y%m%d-%H%M%S",
        clock_offset_s=-0.25,
        clock_sd_s=0.01,
        fo_f2_mhz=4.5,
        hm_f2_km=310,
        scale_height_km=55,
        channel_names=("NS", "EW"),
    )


def test_an_empty_file_is_the_default_station(tmp_path: Path) -> None:
    assert station(tmp_path, "") == Station()


@pytest.mark.parametrize(
    ("text", "message"),
    [
        ("lattitude_deg = 50", r"unknown key 'lattitude_deg' \(did you mean 'latitude_deg'\)"),
        ("hm_f2_km = 300", r"unknown key 'hm_f2_km' \(did you mean 'ionosphere.hm_f2_km'\)"),
        ("[clock]\noffset = 1", r"unknown key 'clock.offset' \(did you mean 'clock.offset_s'\)"),
        ("zzz = 1", r"unknown key 'zzz' \(known keys: name, "),
        ("[zzz]\nqqq = 1", r"unknown key 'zzz'"),
        ("mains_hz = 55", r"mains_hz=55 must be 50 or 60"),
        ("mains_hz = '50'", r"mains_hz='50' must be a number"),
        ("latitude_deg = true", r"latitude_deg=True must be a number"),
        ("latitude_deg = 91", r"latitude_deg=91 is outside -90 to 90"),
        ("latitude_deg = nan", r"latitude_deg=nan is outside -90 to 90"),
        ("name = 7", r"name=7 must be text"),
        ("clock = 7", r"unknown key 'clock'"),
        ("[audio]\nchannels = 2", r"audio.channels=2 must be a list of texts"),
        ("[audio]\nchannels = ['a', 2]", r"audio.channels=.* must be a list of texts"),
        ("file_time_pattern = '%H%M'", r"does not hold a whole date"),
        ("file_time_pattern = '%Y%m%d %p'", r"uses '%p' \(known directives: %Y"),
        ("file_time_pattern = '%Y%m%d%d'", r"uses a directive twice"),
        ("name = ", r"is not TOML"),
    ],
)
def test_a_fault_names_key_value_and_remedy(tmp_path: Path, text: str, message: str) -> None:
    with pytest.raises(UsageError, match=rf"E602 .*s\.toml.*{message}") as caught:
        station(tmp_path, text)
    assert caught.value.exit_code == 2


def test_all_faults_are_told_at_once(tmp_path: Path) -> None:
    with pytest.raises(UsageError, match=r"unknown key 'nam' .*mains_hz=1 .*fo_f2_mhz=99 "):
        station(tmp_path, "nam = 'x'\nmains_hz = 1\n[ionosphere]\nfo_f2_mhz = 99")


@pytest.mark.parametrize(
    ("values", "message"),
    [
        ({"max_hops": 0}, "max_hops=0 is outside 1 to 8"),
        ({"false_alarms_per_hour": float("nan")}, "false_alarms_per_hour=nan is outside"),
        ({"band_low_hz": 9e3, "band_high_hz": 8e3}, "band_low_hz=9000.0 is not below"),
        ({"l_range": (3.0, 2.0)}, "l_range=.* is not an increasing pair"),
        ({"channel": 0}, "channel=0 is neither a number from 1 nor 'mean'"),
        ({"channel": "NS"}, "channel=NS is neither a number from 1 nor 'mean'"),
    ],
)
def test_settings_outside_their_range(values: dict[str, object], message: str) -> None:
    with pytest.raises(UsageError, match=message):
        Settings(**values)  # type: ignore[arg-type]


def bext(*, date: bytes, time: bytes, reference: int) -> bytes:
    """A bext chunk by EBU Tech 3285 v2, table of section 2.3, written field by field here."""
    body = b"Night run".ljust(256, b"\0")  # Description
    body += b"Skarnmoor".ljust(32, b"\0")  # Originator
    body += b"SK0001".ljust(32, b"\0")  # OriginatorReference
    body += date.ljust(10, b"\0") + time.ljust(8, b"\0")  # OriginationDate, OriginationTime
    body += struct.pack("<II", reference & 0xFFFFFFFF, reference >> 32)  # TimeReferenceLow, High
    body += struct.pack("<H", 2) + bytes(64)  # Version, UMID
    body += bytes(10) + bytes(180)  # loudness, Reserved
    assert len(body) == 602
    body += b"A=PCM,F=16000\r\n\0"  # CodingHistory
    return b"bext" + struct.pack("<I", len(body)) + body


AFTER_MIDNIGHT_S = 8_100.25  # 02:15:00.25


@pytest.mark.parametrize("before_audio", [True, False])
def test_the_broadcast_extension_dates_a_recording(wav: Path, before_audio: bool) -> None:
    """Reference: EBU Tech 3285: time of first sample = date at midnight + TimeReference / rate."""
    chunk = bext(date=b"2025-03-14", time=b"02-15-00", reference=round(AFTER_MIDNIGHT_S * RATE_HZ))
    data = wav.read_bytes()
    path = wav.with_name("plain.wav")
    path.write_bytes(data[:36] + chunk + data[36:] if before_audio else data + chunk)
    recording = open_recording(path)
    assert recording.start_time_source == "bext"
    assert iso_time(recording.start_time) == "2025-03-14T02:15:00.250Z"
    assert recording.frame_count == 2 * RATE_HZ
    assert peek_start(str(path)) == recording.start_time


@pytest.mark.parametrize(
    ("date", "time", "reference", "expected"),
    [
        (b"2025:03:14", b"02:15:00", 0, "2025-03-14T02:15:00.000Z"),  # no count: the clock time
        (b"2025-03-14", b"00-00-00", 0, "2025-03-14T00:00:00.000Z"),
        (b"2025-03-14", b"", RATE_HZ, "2025-03-14T00:00:01.000Z"),
        (b"2025-03-14", b"", 2**32 + 7, "2025-03-17T02:33:55.456Z"),  # both words: 268435.456 s
        (b"2025-13-14", b"02-15-00", 7, None),
        (b"", b"", 7, None),
        (b"\xff" * 10, b"\xff" * 8, 7, None),
    ],
)
def test_broadcast_dates_of_all_kinds(
    wav: Path, date: bytes, time: bytes, reference: int, expected: str | None
) -> None:
    """Reference: EBU Tech 3285 allows - _ : . and space between the numbers; sums by hand."""
    path = wav.with_name("plain.wav")
    path.write_bytes(wav.read_bytes() + bext(date=date, time=time, reference=reference))
    assert iso_time(open_recording(path).start_time) == expected


@pytest.mark.parametrize("size", [0, 100, 337, 345])
def test_a_stump_of_a_broadcast_extension(wav: Path, size: int) -> None:
    body = bext(date=b"2025-03-14", time=b"02-15-00", reference=7)[8 : 8 + size]
    path = wav.with_name("plain.wav")
    path.write_bytes(
        wav.read_bytes() + b"bext" + struct.pack("<I", size) + body + b"\0" * (size % 2)
    )
    assert open_recording(path).start_time_source == "unknown"


def test_the_rules_apply_in_order(wav: Path) -> None:
    """Reference: --start, station pattern, bext, default patterns; the clock offset on all but the
    first."""
    chunk = bext(date=b"2025-03-14", time=b"03-00-00", reference=0)
    path = wav.with_name("vlf-20250314-040000_20250314T050000Z.wav")
    described = Station(file_time_pattern="vlf-%Y%m%d-%H%M%S", clock_offset_s=1.5)
    offset_only = Station(clock_offset_s=1.5)
    given = datetime(2025, 3, 14, 2, tzinfo=UTC)

    path.write_bytes(wav.read_bytes() + chunk)
    stated = open_recording(path, station=described, start=given)
    assert (iso_time(stated.start_time), stated.start_time_source) == (
        "2025-03-14T02:00:00.000Z",
        "--start",
    )
    named = open_recording(path, station=described)
    assert (iso_time(named.start_time), named.start_time_source) == (
        "2025-03-14T04:00:01.500Z",
        "station file",
    )
    stamped = open_recording(path, station=offset_only)
    assert (iso_time(stamped.start_time), stamped.start_time_source) == (
        "2025-03-14T03:00:01.500Z",
        "bext",
    )
    path.write_bytes(wav.read_bytes())
    default = open_recording(path, station=offset_only)
    assert (iso_time(default.start_time), default.start_time_source) == (
        "2025-03-14T05:00:01.500Z",
        "file name",
    )


@pytest.mark.parametrize(
    ("name", "expected"),
    [
        ("a_20250314T021500Z_b.flac", "2025-03-14T02:15:00.000Z"),
        ("2025-03-14T02-15-00Z.wav", "2025-03-14T02:15:00.000Z"),
        ("20251314T021500Z.wav", None),  # no month 13
        ("120250314T021500Z.wav", None),  # nine digits are no date
        ("20250314T021500.wav", None),  # without Z it is not said to be UTC
        ("20250314T021560Z.wav", None),  # a leap second cannot be held
        ("20251314T021500Z_20250314T021500Z.wav", "2025-03-14T02:15:00.000Z"),
    ],
)
def test_times_in_names(name: str, expected: str | None) -> None:
    assert iso_time(start_time(name).time) == expected


@pytest.mark.parametrize("text", ["yesterday", "", "2025-02-30", "25-03-14", "2025-03-14T25:00"])
def test_what_is_no_time(text: str) -> None:
    with pytest.raises(UsageError, match=r"E603 .*not an ISO 8601 time; write it as 2025-"):
        parse_time(text)


def test_decimal_year() -> None:
    """Reference: day counts by hand; 2024 has 366 days."""
    assert decimal_year(datetime(2024, 12, 31, tzinfo=UTC)) == pytest.approx(2024 + 365 / 366)
    assert decimal_year(None) == 2025.0


def test_milliseconds_round_into_the_next_year() -> None:
    late = datetime(2025, 12, 31, 23, 59, 59, 999_600, tzinfo=UTC)
    assert iso_time(late) == "2026-01-01T00:00:00.000Z"
