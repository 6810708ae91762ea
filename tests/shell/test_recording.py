"""Reading recordings: every container, every way a file can lie."""

from __future__ import annotations

import os
import re
import signal
import struct
import subprocess
import sys
import time
from itertools import pairwise
from pathlib import Path

import numpy as np
import pytest
import soundfile
from hypothesis import given, settings
from hypothesis import strategies as st
from shell_helpers import RATE_HZ, noise, write

from whistler import stopping
from whistler.audiofile import AudioFile
from whistler.errors import RecordingError, Stopped
from whistler.recording import Recording, open_recording
from whistler.riff import ByteWindow, read_layout


def codes(recording: Recording) -> set[str]:
    return {notice.code for notice in recording.notices}


def samples_of(recording: Recording) -> np.ndarray:
    return np.concatenate([block.samples for block in recording.blocks(0.7)])


@pytest.mark.parametrize(
    ("ending", "options", "tolerance"),
    [
        # half a step of the format; lossy formats keep the shape only
        (".wav", {"subtype": "PCM_U8"}, 1 / 128),
        (".wav", {"subtype": "PCM_16"}, 1 / 2**15),
        (".wav", {"subtype": "PCM_24"}, 1 / 2**23),
        (".wav", {"subtype": "FLOAT"}, 0.0),
        (".wav", {"subtype": "DOUBLE"}, 0.0),
        (".wav", {"subtype": "ULAW"}, 0.02),
        (".wav", {"format": "WAVEX", "subtype": "PCM_24"}, 1 / 2**23),
        (".wav", {"endian": "BIG", "subtype": "PCM_16"}, 1 / 2**15),
        (".rf64", {"format": "RF64", "subtype": "PCM_16"}, 1 / 2**15),
        (".w64", {"format": "W64", "subtype": "PCM_16"}, 1 / 2**15),
        (".aiff", {"subtype": "PCM_16"}, 1 / 2**15),
        (".caf", {"subtype": "PCM_16"}, 1 / 2**15),
        (".au", {"subtype": "PCM_16"}, 1 / 2**15),
        (".flac", {"subtype": "PCM_16"}, 1 / 2**15),
        (".ogg", {}, 0.25),
        (".mp3", {}, 0.5),
    ],
)
def test_every_container_is_read(
    tmp_path: Path, ending: str, options: dict[str, str], tolerance: float
) -> None:
    """Reference: the samples that were written; tolerance as commented."""
    source = noise()
    path = write(tmp_path / f"x{ending}", source, **options)
    recording = open_recording(path)
    assert recording.sample_rate_hz == RATE_HZ
    assert codes(recording) == {"N301"}  # no start time, nothing else
    heard = samples_of(recording)
    assert len(heard) == recording.frame_count
    if ending == ".mp3":  # the encoder pads both ends
        assert abs(recording.duration_s - 2.0) < 0.2
    else:
        assert np.abs(heard - source[:, 0]).max() <= tolerance


@pytest.mark.parametrize("rate_hz", [8_000, 11_025, 44_100, 96_000, 192_000, 200_000])
def test_the_rate_is_left_alone(tmp_path: Path, rate_hz: int) -> None:
    """Identity: frames and rate out equal frames and rate in."""
    soundfile.write(tmp_path / "x.wav", np.zeros(2 * rate_hz) + noise(1)[0], rate_hz)
    recording = open_recording(tmp_path / "x.wav")
    assert (recording.sample_rate_hz, recording.frame_count) == (rate_hz, 2 * rate_hz)


@pytest.mark.parametrize("rate_hz", [4_000, 7_999, 384_000])
def test_other_rates_are_refused(tmp_path: Path, rate_hz: int) -> None:
    soundfile.write(tmp_path / "x.wav", np.zeros(2 * rate_hz), rate_hz)
    with pytest.raises(RecordingError, match=rf"E112 .*{rate_hz} Hz is outside 8000 to 200000"):
        open_recording(tmp_path / "x.wav")


def test_blocks_overlap_as_asked_and_cover_everything(wav: Path) -> None:
    """Identity: any cutting into blocks gives the same samples at the same frames."""
    recording = open_recording(wav)
    whole = next(recording.blocks(1e6)).samples
    covered = np.zeros(recording.frame_count, int)
    blocks = list(recording.blocks(0.3, overlap_s=0.1))
    for block in blocks:
        stop = block.first_frame + len(block.samples)
        covered[block.first_frame : stop] += 1
        assert np.array_equal(block.samples, whole[block.first_frame : stop])
    assert covered.min() == 1
    assert covered.max() == 2
    steps = {b.first_frame - a.first_frame for a, b in pairwise(blocks)}
    assert steps == {round(0.2 * RATE_HZ)}


def test_blocks_do_not_repeat_a_tail_already_given(tmp_path: Path) -> None:
    """Identity: a file of exactly two blocks gives two, not a third of overlap alone."""
    write(tmp_path / "x.wav", noise(1.7))
    blocks = list(open_recording(tmp_path / "x.wav").blocks(1.0, overlap_s=0.3))
    assert [block.first_frame for block in blocks] == [0, round(0.7 * RATE_HZ)]


def test_channels_are_chosen_or_averaged(tmp_path: Path) -> None:
    """Reference: the channels that were written."""
    source = noise(channels=3)
    write(tmp_path / "x.wav", source, subtype="FLOAT")
    for channel in (1, 2, 3):
        heard = samples_of(open_recording(tmp_path / "x.wav", channel=channel))
        assert np.array_equal(heard, source[:, channel - 1])
    heard = samples_of(open_recording(tmp_path / "x.wav", channel="mean"))
    assert np.allclose(heard, source.mean(axis=1), atol=1e-7)  # single precision
    with pytest.raises(RecordingError, match=r"channel=4 is not among 1, 2, 3, mean"):
        open_recording(tmp_path / "x.wav", channel=4)


def test_a_dead_channel_is_named_and_left_out_of_the_mean(tmp_path: Path) -> None:
    """Reference: the two live channels that were written."""
    source = noise(channels=3)
    source[:, 1] = 0.25
    write(tmp_path / "x.wav", source, subtype="FLOAT")
    mean = open_recording(tmp_path / "x.wav", channel="mean")
    assert mean.dead_channels == (2,)
    assert "W207" in codes(mean)
    assert np.allclose(samples_of(mean), source[:, [0, 2]].mean(axis=1), atol=1e-7)
    dead = open_recording(tmp_path / "x.wav", channel=2)
    assert {"W206", "W207"} <= codes(dead)
    assert dead.live_time_s == 0.0


def header_of(path: Path) -> bytearray:
    data = bytearray(path.read_bytes())
    assert data[36:40] == b"data", "the writer's plain 44-byte header"
    return data


@pytest.mark.parametrize("claimed", [0, 0x7FFFFFFF, 0x80000000, 0xFFFFFFFF])
def test_a_length_never_filled_in(wav: Path, claimed: int) -> None:
    """Identity: all samples of the sound file, and a warning."""
    expected = samples_of(open_recording(wav))
    data = header_of(wav)
    data[4:8] = data[40:44] = struct.pack("<I", claimed)
    wav.write_bytes(data)
    recording = open_recording(wav)
    assert codes(recording) == {"W105"}
    assert recording.complete
    assert np.array_equal(samples_of(recording), expected)


def test_a_length_too_small(wav: Path) -> None:
    """Identity: all samples of the sound file, and a warning."""
    expected = samples_of(open_recording(wav))
    data = header_of(wav)
    data[40:44] = struct.pack("<I", 1000)
    wav.write_bytes(data)
    recording = open_recording(wav)
    assert codes(recording) == {"W106"}
    assert np.array_equal(samples_of(recording), expected)


def test_a_text_chunk_after_the_audio_is_not_audio(wav: Path) -> None:
    """Identity: a chunk that follows changes nothing."""
    expected = samples_of(open_recording(wav))
    wav.write_bytes(wav.read_bytes() + b"LIST" + struct.pack("<I", 4) + b"INFO")
    recording = open_recording(wav)
    assert codes(recording) == set()
    assert np.array_equal(samples_of(recording), expected)


@pytest.mark.parametrize("size", [*range(0, 60, 7), 33_000, 50_001])
def test_a_truncated_wav_keeps_its_beginning(wav: Path, size: int) -> None:
    """Identity: what is there equals the beginning of the whole; too little is refused."""
    expected = samples_of(open_recording(wav))
    wav.write_bytes(wav.read_bytes()[:size])
    if size < 44 + 2 * RATE_HZ:
        with pytest.raises(RecordingError, match=r"E10[237] "):
            open_recording(wav)
        return
    recording = open_recording(wav)
    assert codes(recording) == {"W104"}
    assert not recording.complete
    heard = samples_of(recording)
    assert len(heard) == (size - 44) // 2
    assert np.array_equal(heard, expected[: len(heard)])


@pytest.mark.parametrize("trailer", [b"", b"LIST" + struct.pack("<I", 4) + b"INFO"])
def test_a_length_that_ran_over_at_4_gib(wav: Path, trailer: bytes) -> None:
    """Reference: the size of a sparse file of 4.5 GiB whose 32-bit length wrapped."""
    true_size = int(4.5 * 2**30)
    data = header_of(wav)[:44]
    data[40:44] = struct.pack("<I", true_size % 2**32)
    with wav.open("wb") as file:
        file.write(data)
        file.truncate(44 + true_size)
        file.seek(44 + true_size)
        file.write(trailer)
    descriptor = os.open(wav, os.O_RDONLY)
    layout = read_layout(descriptor, os.fstat(descriptor).st_size)
    os.close(descriptor)
    assert (layout.state, layout.data_size) == ("wrapped", true_size)
    with AudioFile(os.fspath(wav)) as audio:
        assert [notice.code for notice in audio.notices] == ["W107"]
        assert audio.declared_frames == true_size // 2


@pytest.mark.parametrize("size", [0xFFFFFFF4, 0xFFFFFFF8])
def test_a_text_chunk_that_traps_the_decoder_is_never_shown_to_it(wav: Path, size: int) -> None:
    """Identity: the samples without that chunk. In a process of its own, for it would hang."""
    data = wav.read_bytes()
    bad = b"INFO" + b"ISFT" + struct.pack("<I", size) + bytes(8)
    chunk = b"LIST" + struct.pack("<I", len(bad)) + bad
    wav.write_bytes(data[:36] + chunk + data[36:])
    program = (
        "import sys; from whistler.recording import open_recording as o; print(o(sys.argv[1]))"
    )
    process = subprocess.run(
        [sys.executable, "-c", program, wav], capture_output=True, timeout=30, check=True
    )
    assert b"frame_count=32000" in process.stdout


def test_damage_in_a_flac_costs_seconds_not_the_file(tmp_path: Path) -> None:
    """Identity: everything outside the damage is bit-exact and in its place.

    Tolerance: 64 bad bytes touch at most two FLAC frames of 4096 samples, and the steps past the
    damage double, so at most twice that is lost.
    """
    path = write(tmp_path / "x.flac", noise(20.0))
    expected = samples_of(open_recording(path))
    data = bytearray(path.read_bytes())
    middle = len(data) // 2
    data[middle : middle + 64] = bytes(64)
    path.write_bytes(data)
    recording = open_recording(path)
    assert codes(recording) == {"W108", "N301"}
    assert not recording.complete
    blocks = list(recording.blocks(1e6))
    heard, usable = blocks[0].samples, blocks[0].usable
    assert len(heard) == len(expected)
    assert 0 < (~usable).sum() <= 4 * 4096
    assert np.array_equal(heard[usable], expected[usable])


def test_a_truncated_flac_keeps_its_beginning(tmp_path: Path) -> None:
    """Identity: the beginning of the whole, to within one FLAC frame of the cut."""
    path = write(tmp_path / "x.flac", noise(10.0))
    expected = samples_of(open_recording(path))
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    recording = open_recording(path)
    assert "W104" in codes(recording)
    heard = samples_of(recording)
    assert abs(len(heard) - 5 * RATE_HZ) < 8192
    assert np.array_equal(heard, expected[: len(heard)])


def test_a_flac_header_that_does_not_know_its_length(tmp_path: Path) -> None:
    """Identity: all samples but the last, at which the decoder fails without a known end.

    RFC 9639, section 8.2: the total of samples is 36 bits before the MD5; 0 means unknown.
    """
    path = write(tmp_path / "x.flac")
    expected = samples_of(open_recording(path))
    data = bytearray(path.read_bytes())
    data[21] &= 0xF0
    data[22:26] = bytes(4)
    path.write_bytes(data)
    recording = open_recording(path)
    assert codes(recording) == {"N301"}
    heard = samples_of(recording)
    assert len(expected) - len(heard) <= 1
    assert np.array_equal(heard, expected[: len(heard)])


@pytest.mark.parametrize("ending", [".aiff", ".w64", ".au", ".ogg"])
def test_other_containers_tell_that_their_end_is_missing(tmp_path: Path, ending: str) -> None:
    """Identity: half a file gives about half the frames, said to be a part."""
    path = write(tmp_path / f"x{ending}", noise(12.0))
    path.write_bytes(path.read_bytes()[: path.stat().st_size // 2])
    recording = open_recording(path)
    assert "W104" in codes(recording)
    assert not recording.complete
    assert 4.0 < recording.duration_s < 8.0  # Ogg pages are seconds long


def test_the_mp3_decoder_does_not_speak_for_itself(
    tmp_path: Path, capfd: pytest.CaptureFixture[str]
) -> None:
    """Damage in MP3 comes as our own message, not as the decoder's text on standard error."""
    path = write(tmp_path / "x.mp3", noise(10.0))
    data = bytearray(path.read_bytes())
    middle = len(data) // 2
    data[middle : middle + 3000] = bytes(3000)
    path.write_bytes(data)
    recording = open_recording(path)
    assert "W108" in codes(recording)
    os.write(2, b"still open")
    assert capfd.readouterr().err == "still open"


def test_not_finite_samples_are_left_out(tmp_path: Path) -> None:
    """Reference: the three samples spoilt here."""
    source = noise()
    source[[100, 5_000, 20_000], 0] = [np.nan, np.inf, -np.inf]
    write(tmp_path / "x.wav", source, subtype="FLOAT")
    recording = open_recording(tmp_path / "x.wav")
    assert any("3 of 32000 samples" in str(notice) for notice in recording.notices)
    block = next(recording.blocks(1e6))
    assert np.flatnonzero(~block.usable).tolist() == [100, 5_000, 20_000]
    assert np.isfinite(block.samples).all()


def test_clipping_is_reported_and_loudness_is_not(tmp_path: Path) -> None:
    """Reference: 68.3 % of normal values lie within a sigma: at sigma 1 and full scale 1 a share of
    31.7 % is clipped, and half of those that follow another clipped one repeat it: 5.0 %, here
    within 0.5 % (three sigma of the count over 32 000 samples)."""
    write(tmp_path / "loud.wav", noise() * 10, subtype="PCM_16")
    notices = open_recording(tmp_path / "loud.wav").notices
    (text,) = (str(notice) for notice in notices if notice.code == "W202")
    share = float(re.search(r"([\d.]+) % of the samples", text).group(1))
    assert share == pytest.approx(100 * 0.317**2 / 2, abs=0.5)
    peak = noise()
    peak[1000] = 1.0
    write(tmp_path / "peak.wav", peak, subtype="PCM_16")
    assert "W202" not in codes(open_recording(tmp_path / "peak.wav"))
    write(tmp_path / "volts.wav", noise() * 1e6, subtype="FLOAT")
    assert "W202" not in codes(open_recording(tmp_path / "volts.wav"))


def test_silence_is_not_live_time(tmp_path: Path) -> None:
    """Reference: 0.5 s set to one value here, 0.05 s too short to count."""
    source = noise(3.0)
    source[RATE_HZ : RATE_HZ + RATE_HZ // 2] = 0.01
    source[40_000:40_800] = 0.0
    write(tmp_path / "x.wav", source, subtype="FLOAT")
    recording = open_recording(tmp_path / "x.wav")
    assert "W206" in codes(recording)
    assert recording.live_time_s == pytest.approx(2.5)
    assert recording.unusable_frames == ((RATE_HZ, RATE_HZ + RATE_HZ // 2),)


@pytest.mark.parametrize(
    ("name", "content", "reason"),
    [
        ("empty.wav", b"", "E102 .*empty file"),
        ("text.wav", b"frequency_hz,time_s\n" * 9000, "E102 .*not an audio file"),
        ("text.au", b"these are only words\n" * 9000, "E102 .*not an audio file"),
        ("text.vox", b"these are only words\n" * 9000, "E102 .*not an audio file"),
        ("text.raw", b"these are only words\n" * 9000, "E102 .*not an audio file"),
        ("picture.wav", b"RIFF\x00\x00\x00\x00WEBPVP8 " + bytes(99), "E102 .*RIFF file without"),
        ("rubbish.flac", b"fLaC" + bytes(range(256)) * 40, "E103 .*not decodable"),
        ("rubbish.mp3", b"ID3" + bytes(5000), "E10[37] "),
        ("short.wav", None, "E107 .*too short: 0.500 s"),
    ],
)
def test_what_is_no_recording_is_refused(
    tmp_path: Path, name: str, content: bytes | None, reason: str
) -> None:
    path = tmp_path / name
    if content is None:
        write(path, noise(0.5))
    else:
        path.write_bytes(content)
    with pytest.raises(RecordingError, match=reason):
        open_recording(path)


def test_the_content_decides_not_the_name(tmp_path: Path, wav: Path) -> None:
    """Identity: the same samples under a wrong name, with a note."""
    other = tmp_path / "other_20250314T021500Z.flac"
    other.write_bytes(wav.read_bytes())
    recording = open_recording(other)
    assert codes(recording) == {"N101"}
    assert np.array_equal(samples_of(recording), samples_of(open_recording(wav)))


def test_pipes_and_folders_are_refused_at_once(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe.wav")
    (tmp_path / "folder.wav").mkdir()
    begin = time.monotonic()
    for name, reason in {"pipe.wav": "not a regular file", "folder.wav": "a folder"}.items():
        with pytest.raises(RecordingError, match=f"E113 .*{reason}"):
            open_recording(tmp_path / name)
    with pytest.raises(RecordingError, match=r"E101 .*no such file"):
        open_recording(tmp_path / "absent.wav")
    assert time.monotonic() - begin < 1.0


def test_a_file_that_changes_while_it_is_read(wav: Path) -> None:
    recording = open_recording(wav)
    write(wav, noise(3.0), subtype="PCM_16")
    with pytest.raises(RecordingError, match=r"E109 .*changed while it was read"):
        list(recording.blocks(1.0))


@pytest.mark.parametrize(
    "name", [b"bad\xff.wav", b"a\nb.wav", "жук ☂.wav".encode(), b"[red]$x_1$%s{}.wav", b"-x.wav"]
)
def test_odd_names_are_only_names(tmp_path: Path, wav: Path, name: bytes) -> None:
    """Identity: the samples under a plain name."""
    path = os.fsencode(tmp_path) + b"/" + name
    Path(os.fsdecode(path)).write_bytes(wav.read_bytes())
    recording = open_recording(os.fsdecode(path))
    assert recording.frame_count == 2 * RATE_HZ
    assert "\n" not in "".join(map(str, recording.notices))


def test_a_stop_while_the_decoder_reads_is_not_lost(
    wav: Path, monkeypatch: pytest.MonkeyPatch, capfd: pytest.CaptureFixture[str]
) -> None:
    """A signal that comes in the middle of the decoder's own call stops the work right after."""
    handlers = {number: signal.getsignal(number) for number in stopping.SIGNALS}
    stopping.listen()
    readinto = ByteWindow.readinto
    signals = iter([signal.SIGTERM])  # one: a second would end the process

    def interrupted(window: ByteWindow, buffer: bytearray) -> int:
        if window.tell() > 1000 and next(signals, None):
            os.kill(os.getpid(), signal.SIGTERM)
            time.sleep(0.01)
        return readinto(window, buffer)

    monkeypatch.setattr(ByteWindow, "readinto", interrupted)
    try:
        with pytest.raises(Stopped) as stop:
            open_recording(wav)
        assert stop.value.signal_number == signal.SIGTERM
    finally:
        for number, handler in handlers.items():
            signal.signal(number, handler)
    assert capfd.readouterr().err == ""


WAV_BYTES = bytes.fromhex(
    "52494646 24000000 57415645 666d7420 10000000 0100 0100 803e0000 007d0000 0200 1000 64617461"
    "00000000".replace(" ", "")
)


@settings(max_examples=150, deadline=None)
@given(
    changes=st.lists(
        st.tuples(st.integers(0, 43), st.sampled_from([0, 1, 2, 0x40, 0x7F, 0x80, 0xF4, 0xFF])),
        max_size=6,
    ),
    length=st.integers(0, 40_000),
)
def test_no_header_brings_anything_but_a_refusal(
    tmp_path_factory: pytest.TempPathFactory, changes: list[tuple[int, int]], length: int
) -> None:
    """Identity: any header gives a recording no longer than the file, or a RecordingError."""
    data = bytearray(WAV_BYTES) + bytearray(np.arange(length, dtype="<u2").tobytes())
    data[40:44] = struct.pack("<I", 2 * length)
    for position, value in changes:
        data[position] = value
    path = tmp_path_factory.getbasetemp() / "mutated.wav"
    path.write_bytes(data)
    try:
        recording = open_recording(path)
    except RecordingError as error:
        assert error.exit_code == 4
    else:
        assert recording.frame_count <= 2 * len(data)  # no format here has under half a byte
        assert sum(len(block.samples) for block in recording.blocks(5.0)) == recording.frame_count
