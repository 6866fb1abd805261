"""Rooms, sources and the ear for howl, each by itself."""

import math
from pathlib import Path

import numpy as np
import pytest
import soundfile

import liveres
from liveres.engine.settings import Notch, Resonator
from liveres.errors import ParameterError
from liveres.hosts.rehearsal_files import load_room, load_source
from liveres.rooms.bounds import ROOMS, SOURCES
from liveres.rooms.convolution import Convolver
from liveres.rooms.howl import HowlMeter
from liveres.rooms.impulse import LOOP_FRAMES, Room
from liveres.rooms.loop import Loop
from liveres.rooms.sources import Looped, Noise, plucked_tune
from liveres.rooms.stability import highest_stable_gain, loop_response, room_response

RATE_HZ = 48_000
FOLDER = Path(liveres.__file__).parent / "data" / "rooms"


def exponential(decay_s, seconds, seed=0):
    """Noise under an exponential that falls 60 dB in ``decay_s``."""
    t = np.arange(round(seconds * RATE_HZ)) / RATE_HZ
    return np.random.default_rng(seed).standard_normal(len(t)) * 10.0 ** (-3.0 * t / decay_s)


# --- impulse responses ---------------------------------------------------------------------------


@pytest.mark.parametrize("decay_s", [0.4, 1.0, 2.0])
def test_the_decay_of_an_exponential_room_is_read_right(decay_s):
    """ISO 3382-1 counts 5 % as just heard; noise of this length scatters by some 2 %."""
    assert Room("x", exponential(decay_s, 1.5 * decay_s), RATE_HZ).decay_s == pytest.approx(decay_s, rel=0.03)


def test_the_decay_of_a_single_arrival_is_none():
    """A loop of one tap is legal and must not divide by nothing."""
    assert Room("x", [0.5], RATE_HZ).decay_s == 0.0


@pytest.mark.parametrize(
    "impulse, message",
    [
        ([], "impulse must be a row of samples, got shape (0,): take one channel of it"),
        ([[1.0, 0.5]], "impulse must be a row of samples, got shape (1, 2): take one channel of it"),
        ([1.0, math.nan], "impulse must hold finite samples only, got one that is not: measure or export it again"),
        ([0.0, 0.0], "impulse must hold a sound, got zeros only: measure or export it again"),
        (np.ones(480_001), "impulse must be from 0 to 10 s, got 10.0000208333: cut it where it has died away"),
    ],
)
def test_what_is_no_impulse_response_is_refused(impulse, message):
    """Each would otherwise turn up as a silent or endless room."""
    with pytest.raises(ParameterError) as caught:
        Room("x", impulse, RATE_HZ)
    assert str(caught.value) == message


@pytest.mark.parametrize("impulse", [exponential(0.5, 0.5), [4.0], [-1e-6]], ids=["room", "tap", "turned"])
def test_a_scaled_room_bears_six_decibels(impulse):
    """0 dB is then a sensible start in any room, however loud it was measured."""
    room = Room("x", impulse, RATE_HZ).scaled()
    assert highest_stable_gain(room_response(room.impulse, LOOP_FRAMES, RATE_HZ)).gain_db == pytest.approx(6.0, abs=1e-9)
    assert room.impulse == pytest.approx(np.asarray(impulse) * 10 ** (room.scaled_db / 20))


def test_the_rooms_that_ship_are_those_that_are_named():
    """The help lists them, the folder holds them."""
    assert sorted(path.name for path in FOLDER.iterdir()) == sorted(f"{name}.flac" for name in ROOMS)


@pytest.mark.parametrize("name", ROOMS)
def test_a_shipped_room_is_small_and_sounds_like_a_room(name):
    """Small files keep the clone quick; a decay of 0.4 to 2.2 s spans talks to services."""
    path = FOLDER / f"{name}.flac"
    assert path.stat().st_size < 250_000
    assert (soundfile.info(path).samplerate, soundfile.info(path).channels, soundfile.info(path).subtype) == (48_000, 1, "PCM_24")
    room, notes = load_room(name, RATE_HZ)
    assert notes == [] and 0.4 <= room.decay_s <= 2.2


# --- what the loop bears -------------------------------------------------------------------------


def test_a_loop_without_return_bears_any_gain():
    """A preset that lets nothing through cannot howl."""
    loop = loop_response(room_response(np.ones(1), 64, RATE_HZ), RATE_HZ, [], dry_gain=0.0)
    assert highest_stable_gain(loop) == (math.inf, None)


def test_a_disabled_filter_changes_nothing():
    """It passes sound as if it were not there."""
    room = room_response(exponential(0.3, 0.3), 64, RATE_HZ)
    off = Notch("off", 1000.0, -40.0, q=1.0, enabled=False)
    assert highest_stable_gain(loop_response(room, RATE_HZ, [off])) == highest_stable_gain(loop_response(room, RATE_HZ, []))


def test_a_long_ring_between_the_points_of_the_grid_is_seen():
    """A resonator of 60 s turns the phase within a twentieth of a hertz and carries the loop by itself."""
    ring = Resonator("ring", 1534.5678, 20.0, decay_s=60.0)
    room = room_response(np.array([1.0]), 64, RATE_HZ)
    bears = highest_stable_gain(loop_response(room, RATE_HZ, [ring], dry_gain=0.001))
    # the phase of 64 frames at 1534.5678 Hz must be made up by the ring, which costs the cosine of it
    lost_db = -20 * np.log10(np.cos(2 * np.pi * 1534.5678 * 64 / RATE_HZ))
    assert bears.frequency_hz == pytest.approx(1534.5678, abs=0.05)
    assert bears.gain_db == pytest.approx(-20.0 + lost_db, abs=0.3)


def test_a_response_nearer_than_a_partition_is_refused():
    """It would have to answer before it was asked."""
    with pytest.raises(ParameterError) as caught:
        Convolver(np.ones(100))
    assert str(caught.value) == "response must be 0 in its first 64 taps, got others: delay it by 64 frames"


# --- sources -------------------------------------------------------------------------------------


def test_a_looped_sound_comes_round_without_a_seam():
    """However it is cut into parts."""
    looped = Looped(np.arange(5.0))
    assert np.array_equal(np.concatenate([looped.part(3), looped.part(8), looped.part(1)]), np.arange(12) % 5)


def test_noise_follows_from_its_seed():
    """The same rehearsal again, or another one."""
    first, again, other = (Noise(0.1, seed).part(10_000) for seed in (1, 1, 2))
    assert np.array_equal(first, again) and not np.array_equal(first, other)
    assert np.sqrt(np.mean(first**2)) == pytest.approx(0.1, rel=0.03)


def test_the_tune_is_of_its_stated_level_and_joins_its_own_start():
    """A click at the seam would sound like a fault of the program."""
    tune = plucked_tune(RATE_HZ)
    assert 20 * np.log10(np.max(np.abs(tune))) == pytest.approx(-18.0)
    assert abs(tune[0] - tune[-1]) <= np.max(np.abs(np.diff(tune)))


@pytest.mark.parametrize("name", SOURCES)
def test_every_named_source_gives_what_is_asked(name):
    """The help lists them."""
    part = load_source(name, RATE_HZ)[0].part(RATE_HZ)
    assert part.shape == (RATE_HZ,) and np.max(np.abs(part)) <= 0.2
    assert (name == "none") == (not np.any(part))


# --- the loudspeaker -----------------------------------------------------------------------------


def test_the_loudspeaker_clips_at_full_scale_and_counts():
    """What comes back is what a driven loudspeaker gives."""
    loop = Loop(Room("x", [1.0], RATE_HZ), 0, Looped(np.zeros(1)), Looped(np.zeros(1)))
    loop.set_gain(2.0, 0)
    loop.hear(64)
    loop.play(np.linspace(-1.0, 1.0, 64))
    assert np.array_equal(loop.hear(64), np.clip(np.linspace(-2.0, 2.0, 64), -1.0, 1.0))
    assert loop.peak == 2.0 and loop.clipped == 32


def test_the_system_gain_moves_straight_and_lands():
    """A ramp taken over by another goes on from where it stands."""
    loop = Loop(Room("x", [1.0], RATE_HZ), 0, Looped(np.zeros(1)), Looped(np.zeros(1)))
    loop.set_gain(0.25, 0)
    loop.set_gain(0.75, 128)
    assert loop.gain == 0.25
    returned = []
    for _ in range(4):
        returned.append(loop.hear(64))
        loop.play(np.ones(64))
    assert loop.gain == 0.75
    assert np.array_equal(np.concatenate(returned[1:3]), 0.25 + 0.5 * np.arange(128) / 128)


# --- the ear for howl ----------------------------------------------------------------------------


def heard(sound):
    """A meter that has listened to a sound."""
    meter = HowlMeter(RATE_HZ)
    meter.hear(sound)
    return meter


def tone(level_db, seconds=2.0, frequency_hz=1234.5, fall_db_s=0.0):
    """A sine that falls."""
    t = np.arange(round(seconds * RATE_HZ)) / RATE_HZ
    return 10 ** ((level_db - fall_db_s * t) / 20) * np.sin(2 * np.pi * frequency_hz * t)


@pytest.mark.parametrize("frequency_hz", [60.0, 1234.5, 11_000.3])
def test_a_tone_that_stays_is_a_howl_and_its_frequency_is_read(frequency_hz):
    """Within a tenth of a bin, so that a notch can be set there."""
    quiet = np.zeros(10 * 2048)
    meter = heard(np.concatenate([quiet, tone(-30.0, frequency_hz=frequency_hz)]))
    assert meter.howled and meter.howling and meter.began_frame == len(quiet)
    assert meter.frequency_hz == pytest.approx(frequency_hz, abs=2.5)


def test_a_tone_the_guard_holds_down_is_a_howl_though_it_falls():
    """The guard is quicker than half a second, and takes the evidence away."""
    meter = HowlMeter(RATE_HZ)
    falling = np.minimum(0.0, -150.0 * (np.arange(24_000) / RATE_HZ - 0.32))
    sound = tone(-1.0, seconds=0.5) * 10 ** (falling / 20)
    assert not heard(sound).howled
    meter.hear(sound[:15_360])
    assert not meter.howled
    meter.hear(sound[15_360:], held_down=True)
    assert meter.howled and meter.frequency_hz == pytest.approx(1234.5, abs=2.5)


def test_a_howl_that_has_ended_is_remembered_but_not_going_on():
    """A summary tells of the first, a screen of the second."""
    meter = heard(np.concatenate([tone(-20.0), 1e-4 * exponential(9, 1)]))
    assert meter.howled and not meter.howling


@pytest.mark.parametrize(
    "sound",
    [
        tone(-45.0),
        tone(-10.0, fall_db_s=10.0),
        tone(-10.0, seconds=0.4),
        0.1 * np.random.default_rng(0).standard_normal(96_000),
        load_source("speech", RATE_HZ)[0].part(15 * RATE_HZ),
        plucked_tune(RATE_HZ),
        np.zeros(96_000),
    ],
    ids=["faint", "falling", "short", "noise", "speech", "music", "silence"],
)
def test_what_is_no_howl_is_not_taken_for_one(sound):
    """A false one would send somebody hunting for nothing."""
    assert not heard(sound).howled


def test_the_ear_does_not_care_how_sound_is_cut():
    """Windows lie on absolute frames."""
    sound = np.concatenate([np.zeros(777), tone(-20.0)])
    whole, cut = heard(sound), HowlMeter(RATE_HZ)
    for start in range(0, len(sound), 331):
        cut.hear(sound[start : start + 331])
    assert (whole.began_frame, whole.frequency_hz) == (cut.began_frame, cut.frequency_hz)
