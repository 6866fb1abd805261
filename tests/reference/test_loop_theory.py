"""The simulated loop and its stated limits against published loop theory, polynomial roots and SciPy."""

import numpy as np
import pytest
import scipy.signal

from liveres.engine.settings import Notch, Preset, Resonator
from liveres.hosts.rehearsal import Rehearsal
from liveres.hosts.rehearsal_files import load_room, load_source
from liveres.rooms.bounds import ROOMS
from liveres.rooms.convolution import PARTITION, Convolver
from liveres.rooms.impulse import LOOP_FRAMES, Room
from liveres.rooms.sources import Looped
from liveres.rooms.stability import candidates, highest_stable_gain, loop_response, room_response

RATE_HZ = 48_000
DELAY = 480
# frames: 10 ms, as in the table of growth and margin
OPEN = Preset(guard=False)


def delay_loop(gain_db=0.0, sound=None, preset=OPEN):
    """A rehearsal whose whole loop is 0.5 z^-480 at a system gain of 0 dB."""
    source = Looped(np.zeros(1) if sound is None else sound)
    rehearsal = Rehearsal(preset, Room("delay", [0.5], RATE_HZ), source, gain_db, DELAY - LOOP_FRAMES)
    rehearsal.unmute(ramp_s=0.0)
    return rehearsal


@pytest.mark.parametrize("frames", [65, 500, 1024, 1025, 3000, 5121])
def test_the_endless_convolution_equals_scipys(frames):
    """Every partition and every seam between direct sums and spectra is passed; oracle scipy.signal.fftconvolve."""
    random = np.random.default_rng(frames)
    response = random.standard_normal(frames)
    response[:PARTITION] = 0.0
    x = random.standard_normal(PARTITION * 130)
    convolver = Convolver(response)
    y = []
    for part in x.reshape(-1, PARTITION):
        y.append(convolver.ahead)
        convolver.take(part)
    wanted = scipy.signal.fftconvolve(x, response)[: len(x)]
    assert np.max(np.abs(np.concatenate(y) - wanted)) < 1e-11 * np.max(np.abs(wanted))


def test_a_pure_delay_bears_six_decibels_and_may_howl_every_hundred_hertz():
    """0.5 z^-480 at 48 kHz has its limit at 20 log10 2 and phase zero at multiples of rate / delay, by arithmetic."""
    loop = delay_loop()
    assert loop.highest_stable_gain().gain_db == pytest.approx(20 * np.log10(2), abs=1e-9)
    found = sorted(one.frequency_hz for one in candidates(room_response(loop.room.impulse, DELAY, RATE_HZ)))
    assert found == pytest.approx(np.arange(0, 24_001, 100), abs=1e-6)


def test_a_loop_turned_over_howls_half_way_between():
    """-0.5 z^-480: half a turn more moves every candidate by 50 Hz and leaves the limit."""
    found = candidates(room_response(np.array([-0.5]), DELAY, RATE_HZ))
    assert sorted(one.frequency_hz for one in found) == pytest.approx(np.arange(50, 24_000, 100), abs=1e-6)
    assert [one.gain_db for one in found] == pytest.approx([20 * np.log10(0.5)] * 240, abs=1e-9)


FILTERS = [
    Notch("cut", 5000.0, -9.0, q=4.0),
    Resonator("ring", 9000.0, 3.0, q=20.0),
    Notch("off", 800.0, -30.0, q=1.0, enabled=False),
]


@pytest.mark.parametrize("filters", [[], FILTERS], ids=["bare", "filtered"])
@pytest.mark.parametrize("seed", range(6))
def test_the_limit_is_where_a_pole_of_the_closed_loop_leaves_the_unit_circle(seed, filters):
    """An oracle that knows nothing of phase: the roots of denominator - g numerator, by numpy.roots."""
    impulse = np.random.default_rng(seed).standard_normal(24)
    bears = highest_stable_gain(loop_response(room_response(impulse, 3, RATE_HZ), RATE_HZ, filters, dry_gain=0.7))
    numerator, denominator = np.concatenate([np.zeros(3), impulse]), np.ones(1)
    if filters:
        b0, b1, b2, a1, a2 = FILTERS[0].section(RATE_HZ).notch(FILTERS[0].level(RATE_HZ))
        c0, c1, c2, d1, d2 = FILTERS[1].section(RATE_HZ).bandpass()
        bank, dry = FILTERS[1].level(RATE_HZ) * np.array([c0, c1, c2]), 0.7 * np.array([1.0, d1, d2])
        numerator = np.convolve(np.convolve(numerator, [b0, b1, b2]), bank + dry)
        denominator = np.convolve([1.0, a1, a2], [1.0, d1, d2])
    else:
        numerator = 0.7 * numerator

    def largest_pole(gain_db):
        loop = np.zeros(max(len(numerator), len(denominator)))
        loop[: len(denominator)] += denominator
        loop[: len(numerator)] -= 10 ** (gain_db / 20) * numerator
        roots = np.roots(loop)
        return roots[np.argmax(np.abs(roots))]

    assert abs(largest_pole(bears.gain_db - 0.02)) < 1.0 < abs(largest_pole(bears.gain_db + 0.02))
    howls_at_hz = abs(np.angle(largest_pole(bears.gain_db))) * RATE_HZ / (2 * np.pi)
    assert howls_at_hz == pytest.approx(bears.frequency_hz, abs=5.0)


@pytest.mark.parametrize("decay_s", [0.5, 1.0])
def test_random_rooms_bear_what_schroeder_expects(decay_s):
    """-10 log10(log10(B T60 / 22)) - 3.8 dB: van Waterschoot & Moonen 2011, eq. 18, for flat paths of unit mean power."""
    rate_hz, rooms = 14_000, 24
    band_hz = rate_hz / 2
    frames = round(decay_s * rate_hz)
    random = np.random.default_rng(1)
    limits_db = []
    for _ in range(rooms):
        impulse = random.standard_normal(frames) * 10.0 ** (-3.0 * np.arange(frames) / frames)
        impulse /= np.sqrt(np.sum(impulse**2))
        limits_db.append(highest_stable_gain(room_response(impulse, 0, rate_hz)).gain_db)
    expected_db = -10 * np.log10(np.log10(band_hz * decay_s / 22)) - 3.8
    assert np.mean(limits_db) == pytest.approx(expected_db, abs=1.0)


@pytest.mark.parametrize("margin_db, peak_db", [(1, 19.27), (2, 13.74), (3, 10.69), (6, 6.04), (12, 2.51)])
def test_the_closed_loop_rises_by_its_margin(margin_db, peak_db):
    """1 / (1 - g), measured at the microphone of the running loop; the table follows from the formula by arithmetic."""
    sound = np.zeros(96_000)
    sound[0] = 0.5
    gain_db = 20 * np.log10(2) - margin_db
    rung, _ = delay_loop(gain_db, sound).advance(len(sound))
    # the microphone's noise is the same without the impulse, and the loop is linear
    silent, _ = delay_loop(gain_db).advance(len(sound))
    response = np.abs(np.fft.rfft((rung - silent)[:, 0].astype(np.float64))) / 0.5
    assert 20 * np.log10(response.max()) == pytest.approx(peak_db, abs=0.01)


def test_past_the_limit_level_grows_by_the_loop_gain_each_time_round():
    """+1 dB and 10 ms: 100 dB a second, as the table of build-up says."""
    sound = np.zeros(96_000)
    sound[:48] = 0.01 * np.hanning(48)
    heard, _ = delay_loop(20 * np.log10(2) + 1.0, sound).advance(48_000)
    level_db = 10 * np.log10(np.mean(heard.reshape(-1, DELAY).astype(np.float64) ** 2, axis=1))
    growing = np.flatnonzero((level_db > -55.0) & (level_db < -20.0))
    assert len(growing) > 20
    slope_db_s = np.polyfit(growing * DELAY / RATE_HZ, level_db[growing], 1)[0]
    assert slope_db_s == pytest.approx(100.0, abs=1.0)


def rehearse(name, over_db, preset=OPEN, source="noise", seconds=10):
    """A room run at so many decibels over its stated limit; the rehearsal."""
    rehearsal = Rehearsal(preset, load_room(name, RATE_HZ)[0], load_source(source, RATE_HZ)[0])
    rehearsal.set_gain_db(rehearsal.highest_stable_gain().gain_db + over_db, ramp_s=0.0)
    rehearsal.unmute(ramp_s=0.1)
    rehearsal.advance(seconds * RATE_HZ)
    return rehearsal


@pytest.mark.parametrize("name", ROOMS)
def test_a_shipped_room_howls_past_its_limit_where_it_may(name):
    """The limit is true: the same room, a little further. Which of several unstable places wins is a matter of speed."""
    rehearsal = rehearse(name, 2.5)
    assert rehearsal.howl.howled and rehearsal.howl.howling
    loop = room_response(rehearsal.room.impulse, LOOP_FRAMES, RATE_HZ)
    unstable = [one.frequency_hz for one in candidates(loop) if one.gain_db + rehearsal.gain_db > 0.0]
    assert min(abs(one - rehearsal.howl.frequency_hz) for one in unstable) < 3.0


@pytest.mark.parametrize("name, source", [(name, "noise") for name in ROOMS] + [("hall", "speech"), ("stage", "music")])
def test_a_shipped_room_does_not_howl_half_a_decibel_below_its_limit(name, source):
    """The limit is true from below as well, with sound in the room."""
    assert not rehearse(name, -0.5, source=source).howl.howled


@pytest.mark.parametrize("name", ["stage", "hall"])
def test_the_howl_comes_where_it_was_stated_and_a_notch_there_stops_it(name):
    """The job of the whole program, in rooms where one place is ahead of the others by more than a decibel."""
    rehearsal = rehearse(name, 1.0, seconds=12)
    before = rehearsal.highest_stable_gain()
    assert rehearsal.howl.howling and rehearsal.howl.frequency_hz == pytest.approx(before.frequency_hz, abs=2.0)
    rehearsal.add(Notch("first", before.frequency_hz, -9.0, bandwidth_oct=0.1))
    after = rehearsal.highest_stable_gain()
    assert before.gain_db == rehearsal.highest_stable_gain(with_filters=False).gain_db
    assert after.gain_db > rehearsal.gain_db > before.gain_db
    rehearsal.advance(4 * RATE_HZ)
    assert not rehearsal.howl.howling
    _, answered = rehearsal.advance(RATE_HZ)
    assert 20 * np.log10(np.max(np.abs(answered))) < -15.0
