"""Scenes as files and as draws, recordings as files, the demo, the command."""

import json
import re
from dataclasses import replace
from pathlib import Path as FilePath

import numpy as np
import pytest
import soundfile
import typer
from typer.testing import CliRunner

from whistler.commands.synthesize import synthesize
from whistler.errors import OutputError, UsageError
from whistler.synthesis.draw import draw_decoy_scene, draw_scene
from whistler.synthesis.files import flac_bytes, write_recordings
from whistler.synthesis.parts import Chorus, Dropout, Hiss, Mains, Receiver, Sferics, Transmitter
from whistler.synthesis.quick import quick_scene
from whistler.synthesis.render import render
from whistler.synthesis.scene import Scene
from whistler.synthesis.scenefile import load_scene, scene_from_toml, scene_to_toml
from whistler.synthesis.strokes import Medium, Path, Stroke

DEMO = FilePath(__file__).parents[2] / "demo_recordings"
DEMO_SCENES = sorted(DEMO.glob("*.scene.toml"))
HEAD = "duration_s = 2\nsample_rate_hz = 16000\nseed = 1\n"


def busy_scene():
    return Scene(
        duration_s=3.0,
        sample_rate_hz=16_000,
        seed=21,
        name="busy",
        shows='all parts, and "quotes"',
        medium=Medium(fo_f2_mhz=7.0, ions=False),
        strokes=(
            Stroke(0.2, (Path(2.5, 1300.0, frequency_high_hz=6000.0, hops=(1, 3)),)),
            Stroke(0.4, (Path(2.2, 1500.0, hops=(2,), frequency_high_hz=6500.0),)),
        ),
        sferics=(Sferics(), Sferics(rate_hz=3.0, start_s=1.0, duration_s=0.5)),
        mains=Mains(steps_per_minute=20.0),
        hiss=(Hiss(),),
        chorus=(Chorus(),),
        transmitters=(Transmitter(), Transmitter(keying="swept")),
        receiver=Receiver(dropouts=(Dropout(0.1, 0.2),)),
    )


def test_scene_survives_toml():
    """Identity: scene to TOML and back is the same scene."""
    scene = busy_scene()
    assert scene_from_toml(scene_to_toml(scene)) == scene


@pytest.mark.parametrize(
    ("text", "said"),
    [
        ("duration = 2", r"unknown key 'duration'.*'duration_s'"),
        (HEAD + "[mains]\nfrequncy_hz = 50", r"'mains.frequncy_hz'.*'mains.frequency_hz'"),
        (
            HEAD + "[[strokes]]\nlightning_time_s = 1\n[[strokes.paths]]\nl_val = 3",
            r"'strokes.paths.l_val'.*'strokes.paths.l_value'",
        ),
        ("seed = 1", r"'duration_s' is missing"),
        (HEAD.replace("= 2", '= "two"'), r"duration_s='two' is not a number"),
        (HEAD.replace("= 1\n", "= 1.5\n"), r"seed=1.5 is not a whole number"),
        (HEAD + "sferics = 3", r"sferics=3 is not a list"),
        (HEAD + "[noise", "is not TOML"),
        (HEAD + "[mains]\nfrequency_hz = 400", r"Mains.frequency_hz=400.0 is outside 45 to 65"),
        (HEAD + "[[transmitters]]\nkeying = 'off'", r"'off' is not one of steady, keyed, swept"),
    ],
)
def test_wrong_scene_names_key_and_next_step(text, said):
    """Identity: the message names the key, what is wrong and the nearest known key."""
    with pytest.raises(UsageError, match=said):
        scene_from_toml(text)


@pytest.mark.parametrize(
    ("make", "said"),
    [
        (lambda: Path(9.0, 900.0), r"l_value=9.0 is outside 1.3 to 7"),
        (lambda: Path(3.0, 900.0, hops=(1, 2)), "all odd or all even"),
        (lambda: Path(3.0, 900.0, hops=()), "all odd or all even"),
        (lambda: Stroke(1.0, (Path(3, 9, hops=(1,)), Path(3, 9, hops=(2,)))), "only even"),
        (lambda: Path(3.0, 900.0, frequency_high_hz=900.0), "not above frequency_low_hz"),
        (lambda: Sferics(near_m=5e6, far_m=1e6), "below near_m"),
        (lambda: Hiss(3000.0, 2000.0), "not above low_hz"),
        (
            lambda: Scene(2.0, 16_000, 1, strokes=(Stroke(5.0, (Path(3.0, 9.0),)),)),
            "lightning_time_s=5.0 is outside 0 to 2",
        ),
    ],
)
def test_impossible_parts_are_refused(make, said):
    """Identity: ranges are checked when a part is made."""
    with pytest.raises(UsageError, match=said):
        make()


@pytest.mark.parametrize(
    ("path", "rate_hz"),
    [
        (Path(5.0, 200.0, frequency_high_hz=6500.0), 32_000),  # above 0.9 fHeq
        (Path(2.5, 1300.0), 16_000),  # above half the sampling rate
        (Path(6.5, 100.0, frequency_low_hz=2000.0), 32_000),  # low limit above half fHeq
    ],
)
def test_bands_that_are_not_carried_are_refused(path, rate_hz):
    """Identity: a band beyond the gyrofrequency or the sampling rate names its limit."""
    with pytest.raises(UsageError, match=r"nothing above .* Hz is carried"):
        render(Scene(3.0, rate_hz, 1, strokes=(Stroke(0.5, (path,)),)))


def test_same_seed_same_bytes_other_seed_other_bytes():
    """Identity: samples and truth depend on scene and seed alone."""
    scene = busy_scene()
    first, second = render(scene), render(scene)
    assert first.samples.tobytes() == second.samples.tobytes()
    assert first.truth.to_json() == second.truth.to_json()
    assert render(replace(scene, seed=22)).samples.tobytes() != first.samples.tobytes()
    passed = render(scene, np.random.default_rng(scene.seed))
    assert passed.samples.tobytes() == first.samples.tobytes()


def test_a_stroke_changes_nothing_but_itself():
    """Identity: the background's draws do not depend on the strokes."""
    scene = replace(busy_scene(), receiver=Receiver(full_scale=2000.0))
    before_s = 0.15  # the first stroke falls at 0.2 s
    parts = [render(replace(scene, strokes=strokes)) for strokes in ((), scene.strokes)]
    count = int(before_s * scene.sample_rate_hz)
    assert np.array_equal(parts[0].samples[:count], parts[1].samples[:count])
    assert not np.array_equal(parts[0].samples, parts[1].samples)


def test_draws_stay_in_their_ranges():
    """Recovery: over 12 scenes every drawn number lies in the campaign's range."""
    generator = np.random.default_rng(5)
    scenes = [draw_scene(generator) for _ in range(12)]
    strokes = [stroke for scene in scenes for stroke in scene.strokes]
    paths = [path for stroke in strokes for path in stroke.paths]
    assert len(paths) > 60
    assert all(2.2 <= path.l_value <= 4.6 for path in paths)
    weakest = [path.snr_db - path.hop_loss_db * (path.hops[-1] - path.hops[0]) for path in paths]
    assert min(weakest) > 9.5
    assert max(path.snr_db for path in paths) <= 22.0
    assert all(0.0005 <= path.spread_s <= 0.005 for path in paths)
    hops = {stroke.paths[0].hops for stroke in strokes}
    assert {(1,), (2,)} < hops
    assert any(len(one) > 1 for one in hops)
    log_ratio = [
        np.log10(path.equatorial_density_cm3) - (3.9043 - 0.3145 * path.l_value) for path in paths
    ]  # Carpenter and Anderson 1992, second-hand
    assert abs(np.mean(log_ratio)) < 0.1
    assert 0.08 < np.std(log_ratio) < 0.25


def test_drawn_traces_are_complete_and_of_one_stroke_at_a_time():
    """Identity: every trace ends before the next stroke and before the end of the recording."""
    truth = render(draw_scene(np.random.default_rng(6), duration_s=40.0)).truth
    assert truth.whistlers
    assert all(row.complete for row in truth.whistlers)
    for group in range(1, truth.whistlers[-1].group):
        last = max(row.trace.time_s.max() for row in truth.whistlers if row.group == group)
        following = next(row for row in truth.whistlers if row.group == group + 1)
        assert last < following.lightning_time_s


def test_decoys_hold_no_whistler():
    """Identity: no strokes with paths; sferic rates span 3 to 80 a second."""
    generator = np.random.default_rng(7)
    scenes = [draw_decoy_scene(generator) for _ in range(40)]
    assert not any(scene.strokes for scene in scenes)
    rates = [scene.sferics[0].rate_hz for scene in scenes]
    assert 3.0 <= min(rates) < 8.0
    assert 40.0 < max(rates) <= 80.0
    short = draw_decoy_scene(generator, duration_s=3.0)
    assert render(short).truth.whistlers == ()


@pytest.mark.parametrize("path", DEMO_SCENES, ids=lambda path: path.name.split(".")[0])
def test_demo_is_made_again(path):
    """Regression: rendering a demo scene gives the FLAC samples and the truth JSON on disk."""
    recording = render(load_scene(path))
    stem = path.name.removesuffix(".scene.toml")
    assert recording.truth.to_json() == (DEMO / f"{stem}.truth.json").read_text()
    kept, rate_hz = soundfile.read(DEMO / f"{stem}.flac", dtype="float32")
    assert rate_hz == recording.sample_rate_hz
    assert np.array_equal(kept, recording.samples)


def test_demo_is_complete_small_and_described():
    """Identity: at least five recordings, at most 12 MiB, each with one line in the index."""
    index = (DEMO / "INDEX.txt").read_text()
    assert len(DEMO_SCENES) >= 5
    assert sum(item.stat().st_size for item in DEMO.iterdir()) < 12 * 2**20
    for path in DEMO_SCENES:
        scene = load_scene(path)
        assert f"{scene.name}.flac: {scene.shows}\n" in index
        stamp = re.search(r"\d{8}T\d{6}Z", scene.name)
        assert stamp is not None
        assert re.sub(r"[-:]", "", scene.start_time) == stamp.group()


def test_truth_has_the_names_of_the_catalogue():
    """Identity: the contract's keys, plain numbers, one row a hop."""
    scene = quick_scene(2.5, equatorial_density_cm3=1300.0, duration_s=4.0, sample_rate_hz=32_000)
    document = json.loads(render(scene).truth.to_json())
    assert document["schema"] == 1
    assert scene_from_toml(scene_to_toml(scene)).to_dict() == document["scene"]
    (row,) = document["whistlers"]
    wanted = {
        "group", "hops", "l_value", "equatorial_density_cm3", "lightning_time_s", "sferic_time_s",
        "sferic_seen", "snr_db", "frequency_low_hz", "frequency_high_hz",
        "equatorial_gyrofrequency_hz", "trace",
    }  # fmt: skip
    assert wanted <= set(row)
    assert len(row["trace"]["frequency_hz"]) == len(row["trace"]["time_s"])


def test_files_are_kept_unless_told_otherwise(tmp_path):
    """Identity: the same content is no conflict, other content is refused, --overwrite replaces."""
    scene = Scene(1.0, 16_000, 1, name="one")
    (written,) = write_recordings([scene], tmp_path)
    heard, _ = soundfile.read(written.audio_path, dtype="float32")
    assert np.array_equal(heard, written.recording.samples)
    write_recordings([scene], tmp_path)
    with pytest.raises(OutputError, match=r"one.flac.*something else; use --overwrite"):
        write_recordings([replace(scene, seed=2)], tmp_path)
    assert written.audio_path.read_bytes() == flac_bytes(written.recording)
    write_recordings([replace(scene, seed=2)], tmp_path, overwrite=True)
    assert written.audio_path.read_bytes() != flac_bytes(written.recording)
    with pytest.raises(UsageError, match="2 scenes are called so"):
        write_recordings([scene, scene], tmp_path)
    with pytest.raises(UsageError, match="FLAC file cannot hold"):
        write_recordings([busy_scene()], tmp_path)


@pytest.fixture
def run():
    app = typer.Typer()
    app.command()(synthesize)
    return lambda *words: CliRunner().invoke(app, [str(word) for word in words])


def test_command_takes_scene_files(run, tmp_path):
    """Identity: two scenes give four files, a line each, or one JSON document."""
    for name in ("a", "b"):
        (tmp_path / f"{name}.scene.toml").write_text(HEAD)
    scenes = sorted(tmp_path.glob("*.scene.toml"))
    result = run(*scenes, "--out", tmp_path / "out")
    assert result.exit_code == 0
    assert len(result.stdout.splitlines()) == 2
    names = {item.name for item in (tmp_path / "out").iterdir()}
    assert names == {"a.flac", "a.truth.json", "b.flac", "b.truth.json"}
    document = json.loads(run(*scenes, "--out", tmp_path / "out", "--json").stdout)
    assert [one["name"] for one in document["recordings"]] == ["a", "b"]


def test_command_makes_a_quick_recording(run, tmp_path):
    """Identity: --l and --density with --json print the truth that is also written."""
    words = ("--l", 2.4, "--density", 1300, "--duration", 6, "--hops", "1,3", "--seed", 5)
    result = run(*words, "--out", tmp_path, "--json")
    assert result.exit_code == 0
    (path,) = tmp_path.glob("*.truth.json")
    assert result.stdout == path.read_text()
    assert [row["hops"] for row in json.loads(result.stdout)["whistlers"]] == [1, 3]


@pytest.mark.parametrize(
    "words",
    [
        (),
        ("--l", "3"),
        ("--density", "900"),
        ("nowhere.toml",),
        ("--l", "3", "--density", "900", "--hops", "one"),
        ("--l", "30", "--density", "900"),
    ],
)
def test_command_refuses_what_cannot_be_meant(run, tmp_path, words):
    """Identity: wrong use is a UsageError (exit code 2 at the command line), nothing is written."""
    result = run(*words, "--out", tmp_path / "out")
    assert isinstance(result.exception, UsageError)
    assert not (tmp_path / "out").exists()
