"""The presets that come with the program: their figures recomputed from the sources, and their sound.

Every preset is read as its user reads it, from its file, and sounds through the engine that runs live.
"""

import dataclasses
import math
from fractions import Fraction
from pathlib import Path

import mpmath
import numpy as np
import pytest
import scipy.signal
import scipy.special
import soundfile

import liveres
from liveres import load_preset

ROOT = Path(__file__).resolve().parents[2]
FILES = {path.stem: path for path in sorted((ROOT / "presets").glob("*.toml"))}
STRUCK = ("church-bell", "free-bar", "membrane", "stiff-string")
# those that a sharp sound strikes
RATE_HZ = 48_000
LAST_DIGIT_HZ = 0.00051
# the files print centres to 0.001 Hz


def centres(name):
    """Centres [Hz] of a shipped preset, in file order."""
    return [one.centre_hz for one in load_preset(FILES[name]).filters]


def decays(name):
    """Decays [s] of a shipped preset, in file order."""
    return [one.decay_s for one in load_preset(FILES[name]).filters]


def sound(preset, x, channels=1):
    """The preset's output for one signal on every channel, and its meters."""
    engine = liveres.Processor(preset, rate_hz=RATE_HZ, channels=channels)
    y = engine.process(np.repeat(np.asarray(x, float)[:, None], channels, axis=1))
    return y, engine.meters()


def level_db(x):
    """Root mean square in dBFS."""
    return 20 * math.log10(math.sqrt(np.mean(np.square(x))) + 1e-12)


@pytest.fixture(scope="module")
def speech():
    """Eight seconds of the speech that comes with the program, -26 dBFS, and two of silence."""
    x, rate_hz = soundfile.read(ROOT / "liveres" / "data" / "speech.flac")
    assert rate_hz == RATE_HZ
    return np.concatenate([x[: 8 * RATE_HZ], np.zeros(2 * RATE_HZ)])


# --- every file -------------------------------------------------------------------------------


def test_the_presets_that_are_tested_are_those_that_ship():
    """A preset added without a check of its figures would be found here."""
    assert set(FILES) == {*STRUCK, "drone", "speech-reinforcement", "vowel-ah", "vowel-ee"}


@pytest.mark.parametrize("name", FILES)
def test_a_preset_says_what_it_is_and_how_to_use_it(name):
    """The file is the manual: remarks at the top, title and notes for the screen."""
    preset = load_preset(FILES[name])
    assert preset.title
    assert len(preset.notes) > 40
    assert FILES[name].read_text(encoding="utf-8").startswith("# ")
    assert preset.guard


@pytest.mark.parametrize("rate_hz", [44_100, 48_000, 96_000, 192_000])
@pytest.mark.parametrize("name", FILES)
def test_a_preset_can_be_used_at_every_usual_rate_on_one_channel_and_more(name, rate_hz):
    """Nobody should have to edit a file to hear it on his own device."""
    for channels in (1, 2, 5):
        engine = liveres.Processor(load_preset(FILES[name]), rate_hz=rate_hz, channels=channels)
        assert len(engine.filters) == len(load_preset(FILES[name]).filters)


# --- figures ----------------------------------------------------------------------------------


def test_the_bell_has_the_five_tones_and_the_measured_upper_partials():
    """Five-tone tuning: Keltek Trust, to the nominal .25 .5 .6 .75 1. Upper partials of an English bell: from memory."""
    nominal_hz = 880
    five = [nominal_hz * ratio for ratio in (0.25, 0.5, 0.6, 0.75, 1)]
    upper = [440 * ratio for ratio in (2.514, 2.662, 3.011, 4.166, 5.433)]
    assert centres("church-bell") == pytest.approx(five + upper, abs=LAST_DIGIT_HZ)
    tierce_cents = 1200 * math.log2(centres("church-bell")[2] / centres("church-bell")[1])
    assert tierce_cents == pytest.approx(315.641, abs=0.002)  # a minor third, 6:5


def test_the_bar_has_the_modes_of_a_bar_with_free_ends():
    """Roots of cos x cosh x = 1 in 30 digits; ratios of their squares (Thomson, Theory of Vibration, App. D: 2.7565, 5.4039)."""
    with mpmath.workdps(30):
        roots = [mpmath.findroot(lambda x: mpmath.cos(x) * mpmath.cosh(x) - 1, (2 * k + 1) * mpmath.pi / 2) for k in range(1, 6)]
        ratios = [float((root / roots[0]) ** 2) for root in roots]
    assert ratios[1:3] == pytest.approx([2.7565, 5.4039], abs=5e-5)
    assert centres("free-bar") == pytest.approx([440 * ratio for ratio in ratios], abs=LAST_DIGIT_HZ)


def test_the_string_has_stretched_partials():
    """f_n = n f0 sqrt(1 + B n^2), Fletcher 1964 (from memory); +42.23 cents at n = 10 and +157.82 at n = 20 for B = 5e-4."""
    partials = np.arange(1, 25)
    expected = partials * 110 * np.sqrt(1 + 5e-4 * partials**2)
    assert centres("stiff-string") == pytest.approx(expected, abs=LAST_DIGIT_HZ)
    for n, cents in ((10, 42.23), (20, 157.82)):
        assert 1200 * math.log2(centres("stiff-string")[n - 1] / (n * 110)) == pytest.approx(cents, abs=0.01)


def test_the_membrane_has_the_lowest_twelve_modes_in_order():
    """Zeros of the Bessel functions (scipy); Rayleigh, The Theory of Sound, chapter IX. No mode between is left out."""
    zeros = sorted((zero, m, n) for m in range(20) for n, zero in enumerate(scipy.special.jn_zeros(m, 10), start=1))[:12]
    assert centres("membrane") == pytest.approx([110 * zero / zeros[0][0] for zero, _, _ in zeros], abs=LAST_DIGIT_HZ)
    assert [one.name for one in load_preset(FILES["membrane"]).filters] == [f"mode {m},{n}" for _, m, n in zeros]
    published = [1, 1.59334, 2.13555, 2.29542, 2.65307, 2.91730, 3.15546, 3.50015, 3.59848]
    assert [zero / zeros[0][0] for zero, _, _ in zeros[:9]] == pytest.approx(published, abs=5e-6)


@pytest.mark.parametrize(
    ("name", "formants"), [("vowel-ah", [730, 1090, 2440]), ("vowel-ee", [270, 2290, 3010])]
)  # fmt: skip
def test_a_vowel_has_the_mean_formants_of_men(name, formants):
    """Peterson and Barney 1952, 33 men, "hod" and "heed", as later tables print them; usual widths from memory."""
    assert centres(name) == formants
    for one, (least, most) in zip(load_preset(FILES[name]).filters, [(60, 110), (90, 150), (150, 200)], strict=True):
        assert least <= one.bandwidth_hz <= most


def test_the_drone_is_a_chord_in_whole_number_ratios_with_copies_a_few_cents_away():
    """55 Hz is A1 where A4 is 440 Hz (ISO 16); the ratios are exact fractions."""
    found = iter(centres("drone"))
    for ratio in (1, Fraction(3, 2), 2, Fraction(5, 2), 3, 4, 5, 6):
        note_hz = 55 * ratio
        assert next(found) == note_hz
        for cents in (4, -3):
            assert 1200 * math.log2(next(found) / note_hz) == pytest.approx(cents, abs=0.02)
    assert next(found, None) is None


@pytest.mark.parametrize(("name", "first_s"), [("church-bell", 12), ("free-bar", 4), ("membrane", 1.2)])
def test_decays_follow_a_constant_loss_factor(name, first_s):
    """As the files say: every partial rings for as many cycles as the lowest."""
    cycles = [centre * decay for centre, decay in zip(centres(name), decays(name), strict=True)]
    assert decays(name)[0] == first_s
    assert cycles == pytest.approx([cycles[0]] * len(cycles), rel=2e-3)


def test_the_strings_decays_follow_their_two_losses():
    """As the file says: 1/decay = a + b f^2 through 8 s at 110 Hz and 1 s at 2000 Hz."""
    b, a = np.polyfit([110.0**2, 2000.0**2], [1 / 8, 1.0], 1)
    expected = 1 / (a + b * np.square(centres("stiff-string")))
    assert decays("stiff-string") == pytest.approx(expected, abs=5.1e-4)


def for_taps(name: str) -> liveres.Preset:
    """A struck preset with its input turned up as its notes say for single taps."""
    return dataclasses.replace(load_preset(FILES[name]), input_db=0.0)


# --- sound ------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", STRUCK)
def test_a_struck_preset_rings_at_its_partials_levels_and_decays(name):
    """The output is, to a part in three hundred, the sum of damped waves that the file describes, found by least squares."""
    preset = for_taps(name)
    click = np.zeros(RATE_HZ)
    click[0] = 1.0
    y, meters = sound(preset, click)
    assert meters["bus_limiter_most_db"] == meters["limiter_most_db"] == 0.0
    time_s = np.arange(RATE_HZ) / RATE_HZ
    waves = []
    for one in preset.filters:
        fall = 10 ** (-3 * time_s / one.decay_s)
        waves += [fall * np.cos(2 * np.pi * one.centre_hz * time_s), fall * np.sin(2 * np.pi * one.centre_hz * time_s)]
    waves, ringing = np.stack(waves, axis=1)[1:], y[1:, 0]  # frame 0 is the stroke itself
    weights, *_ = np.linalg.lstsq(waves, ringing, rcond=None)
    assert level_db(ringing - waves @ weights) < level_db(ringing) - 50
    amplitudes_db = 20 * np.log10(np.hypot(weights[::2], weights[1::2]))
    assert amplitudes_db == pytest.approx([one.gain_db for one in preset.filters], abs=0.05)


@pytest.mark.parametrize("name", STRUCK)
def test_a_tap_strikes_a_preset_without_meeting_the_limit(name):
    """As the files say: half a sine wave of 1 ms at half of full scale stays under it, and is loud."""
    tap = np.zeros(RATE_HZ)
    tap[:48] = 0.5 * np.sin(np.pi * np.arange(48) / 48)
    y, meters = sound(for_taps(name), tap)
    assert meters["bus_limiter_most_db"] == meters["limiter_most_db"] == 0.0
    assert np.abs(y).max() > 10 ** (-16 / 20)


@pytest.mark.parametrize("name", FILES)
def test_speech_is_heard_at_a_sensible_level_and_never_past_the_ceiling(speech, name):
    """Nobody's ears or loudspeakers pay for trying a preset with what is at hand."""
    preset = load_preset(FILES[name])
    y, meters = sound(preset, speech)
    assert -36 < level_db(y[: 8 * RATE_HZ]) < -18
    assert np.abs(y).max() <= 10 ** (preset.ceiling_db / 20)
    assert meters["bus_limiter_most_db"] > -1.0
    assert meters["limiter_most_db"] > -1.0
    assert meters["guard_most_db"] == 0.0
    assert meters["traps"] == {"input": 0, "state": 0}


@pytest.mark.parametrize("name", STRUCK)
def test_a_voice_sent_to_a_struck_preset_at_full_level_is_held_by_its_limit(speech, name):
    """The mistake the notes warn of is safe."""
    preset = for_taps(name)
    y, meters = sound(preset, speech)
    assert meters["bus_limiter_most_db"] < 0.0
    assert np.abs(y).max() <= 10 ** (meters["bus_limit_db"] / 20) * (1 + 1e-6)


@pytest.mark.parametrize("name", ["vowel-ah", "vowel-ee"])
def test_a_vowel_lifts_noise_at_its_formants(name):
    """The spectrum of noise sent through has its peaks there, to a twentieth of an octave, and falls between them."""
    preset = load_preset(FILES[name])
    y, _ = sound(preset, np.random.default_rng(7).normal(0, 0.05, 20 * RATE_HZ))
    frequency_hz, power = scipy.signal.welch(y[:, 0], RATE_HZ, nperseg=4096)
    for one in preset.filters:
        near = (frequency_hz > one.centre_hz * 2**-0.25) & (frequency_hz < one.centre_hz * 2**0.25)
        peak_hz = frequency_hz[near][np.argmax(power[near])]
        assert abs(math.log2(peak_hz / one.centre_hz)) < 0.05 + one.bandwidth_hz / one.centre_hz / 8
    gaps = [math.sqrt(a * b) for a, b in zip(centres(name)[1:], centres(name)[:-1], strict=True)]
    at = [np.argmin(np.abs(frequency_hz - hz)) for hz in [*centres(name), *gaps]]
    assert min(power[at[:3]]) > 2 * max(power[at[3:]])


def test_the_drone_rings_on_and_is_whole_in_mono(speech):
    """After speech ends it is still there; one channel alone sounds as the first of two, and the second differs."""
    preset = load_preset(FILES["drone"])
    mono, _ = sound(preset, speech)
    stereo, _ = sound(preset, speech, channels=2)
    after = slice(9 * RATE_HZ, 10 * RATE_HZ)
    assert level_db(mono[after]) > -50
    assert mono[:, 0] == pytest.approx(stereo[:, 0], abs=1e-12)  # the sums may stand in another order
    assert level_db(stereo[after, 0] - stereo[after, 1]) > level_db(mono[after]) - 20
    assert abs(level_db(stereo[after, 0]) - level_db(stereo[after, 1])) < 3


def test_speech_reinforcement_cuts_the_mains_as_its_file_says_and_nothing_else():
    """-24 dB at 50 Hz, 18 dB still at 49.8 and 50.2 Hz, -12 dB at 100 Hz, and less than 0.1 dB an octave away."""
    engine = liveres.Processor(load_preset(FILES["speech-reinforcement"]), rate_hz=RATE_HZ, channels=1)
    frequency_hz = np.array([50, 100, 49.8, 50.2, 25, 71, 200, 1000, 8000])
    _, response = scipy.signal.sosfreqz(engine.sos(), frequency_hz, fs=RATE_HZ)
    cut_db = 20 * np.log10(np.abs(response))
    assert cut_db[:2] == pytest.approx([-24, -12], abs=0.02)  # each feels the other a little
    assert cut_db[2:4].max() < -18
    assert cut_db[4:].min() > -0.1
    assert [one.enabled for one in engine.filters] == [True, True, False, False]
