"""Meters for sound in arrays: levels, a tone, splatter, clicks, decay. NumPy and SciPy only.

Sound is (frames,) or (frames, channels), float, full scale 1.0 = 0 dBFS. Where a meter gives one figure for several
channels it is that of the worst. Every meter refuses NaN and infinity: a fault must not hide in a comparison.
"""

from __future__ import annotations

import math
from dataclasses import dataclass

import numpy as np
from numpy.lib.stride_tricks import sliding_window_view
from scipy.ndimage import median_filter
from scipy.signal import fftconvolve, firwin, kaiserord, upfirdn

# --- level ------------------------------------------------------------------------------------

_TRUE_PEAK_PHASES = (
    (
        0.001708984375, 0.010986328125, -0.0196533203125, 0.033203125, -0.0594482421875, 0.1373291015625,
        0.97216796875, -0.102294921875, 0.047607421875, -0.026611328125, 0.014892578125, -0.00830078125,
    ),
    (
        -0.0291748046875, 0.029296875, -0.0517578125, 0.089111328125, -0.16650390625, 0.465087890625,
        0.77978515625, -0.2003173828125, 0.1015625, -0.0582275390625, 0.033081054688, -0.018920898438,
    ),
)  # fmt: skip
# ITU-R BS.1770-5, annex 2: phases 0 and 1 of four; phases 2 and 3 are 1 and 0 read backwards
TRUE_PEAK_TAPS = np.array([*_TRUE_PEAK_PHASES, _TRUE_PEAK_PHASES[1][::-1], _TRUE_PEAK_PHASES[0][::-1]])


@dataclass(frozen=True)
class Level:
    """rms_db : root mean square, a full-scale sine is -3.01; peak_db : largest sample. Both dBFS, -inf for silence."""

    rms_db: float
    peak_db: float


def level_db(y: np.ndarray) -> Level:
    """RMS and peak level of the loudest channel [dBFS]."""
    sound = _columns(y)
    return Level(_db(math.sqrt(np.max(np.mean(sound**2, axis=0)))), _db(np.max(np.abs(sound))))


def true_peak_db(y: np.ndarray) -> float:
    """Largest true peak of any channel [dBFS], 4 times oversampled as ITU-R BS.1770-5, annex 2, has it.

    The sound counts as silent before its first and after its last frame.
    """
    interpolator = TRUE_PEAK_TAPS.T.ravel()
    return _db(np.max(np.abs(upfirdn(interpolator, _columns(y), up=4, axis=0))))


# --- splatter and clicks ----------------------------------------------------------------------

SPLATTER_REJECTION_DB = 180.0
# far under the -140 dBFS asked of the meter's own floor, and what float64 still carries with ease
SPLATTER_EDGE = 0.9
# all is rejected below this part of above_hz and nothing is from above_hz on

CLICK_ORDER = 32
CLICK_WINDOW_S = 0.043
# enough frames to fit 32 coefficients well, short enough that speech and sweeps hold still in it
CLICK_NEAR_S = 0.005
CLICK_RATIO = 30.0
# measured against the median error nearby: spoken sound reaches 18 times it, Gaussian noise 11
CLICK_FLOOR = 2.0**-14
# two steps of a 16-bit file, -84 dBFS: finer may be the rounding of the file


def splatter_db(y: np.ndarray, rate_hz: float, above_hz: float = 5000.0) -> float:
    """Peak of what lies above ``above_hz``, in any channel [dBFS]: the sound of a click under a low tone.

    A linear-phase high-pass: whole from above_hz on, 180 dB down below 0.9 of it. Only places where the filter lies
    wholly inside the sound count, so that the cut ends do not; half its length, 12 ms at the defaults at either end
    above 5 kHz, is thus out of sight.

    Raises : ValueError - above_hz not inside the band; sound shorter than the filter
    """
    if not 0 < above_hz < rate_hz / 2:
        raise ValueError(f"above_hz must be above 0 and below {rate_hz / 2:g} (half of rate_hz), got {above_hz:g}: lower it")
    taps, beta = kaiserord(SPLATTER_REJECTION_DB, (1.0 - SPLATTER_EDGE) * above_hz / (rate_hz / 2))
    taps |= 1
    middle_hz = 0.5 * (1.0 + SPLATTER_EDGE) * above_hz
    high_pass = firwin(taps, middle_hz, window=("kaiser", beta), pass_zero=False, fs=rate_hz)
    sound = _columns(y, least_frames=taps)
    return _db(np.max(np.abs(fftconvolve(sound, high_pass[:, None], mode="valid", axes=0))))


def find_clicks(y: np.ndarray, rate_hz: float) -> np.ndarray:
    """First frame of every click in an otherwise smooth sound, of any channel: steps, bad samples, cuts.

    Each frame's difference from the last is predicted from the 32 before it, by the coefficients that suit its
    surroundings best once the frames that defy prediction are left out. Differences, because a step is then a single
    bad value and not a new kind of sound. A click is an error over CLICK_FLOOR and over CLICK_RATIO times the
    median error nearby; errors closer than CLICK_ORDER frames are one click. A cut through a tone that happens to join
    whole periods leaves no trace to find. The first 33 frames cannot be judged. Speech must have been sampled at twice
    its need or more, as liveres' own passage is: its sharpest edges then stay predictable.

    Source : outliers of the prediction error, Godsill and Rayner, Digital Audio Restoration, 1998, ch. 5 (from memory)
    """
    window = round(CLICK_WINDOW_S * rate_hz)
    near = 2 * round(0.5 * CLICK_NEAR_S * rate_hz) + 1
    clicks: set[int] = set()
    for channel in _columns(y, least_frames=window + 1).T:
        error = np.abs(_prediction_error(np.diff(channel), window))
        usual = median_filter(error, near, mode="nearest")
        bad = np.flatnonzero(error > np.maximum(CLICK_FLOOR, CLICK_RATIO * usual)) + CLICK_ORDER + 1
        fresh = np.diff(bad, prepend=-len(channel)) > CLICK_ORDER
        clicks.update(bad[fresh].tolist())
    return np.array(sorted(clicks), dtype=np.int64)


def _prediction_error(channel: np.ndarray, window: int) -> np.ndarray:
    """Error of predicting each frame from CLICK_ORDER on; fitted in windows half over one another, middles kept."""
    last = len(channel) - window
    error = np.empty(len(channel) - CLICK_ORDER)
    for start in [*range(0, last, window // 2), last]:
        edge = 0 if start == 0 else window // 4
        error[start + edge : start + window - CLICK_ORDER] = _window_error(channel[start : start + window])[edge:]
    return error


def _window_error(window: np.ndarray) -> np.ndarray:
    """Prediction error in one window; frames far off the rest are taken out of the fit until it settles."""
    rows = sliding_window_view(window, CLICK_ORDER + 1)
    past, present = rows[:, :-1], rows[:, -1]
    kept = np.ones(len(present), dtype=bool)
    for _ in range(20):
        normal = past[kept].T @ past[kept]
        normal[np.diag_indices(CLICK_ORDER)] += 1e-11 * np.trace(normal) / CLICK_ORDER + 1e-30
        error = present - past @ np.linalg.solve(normal, past[kept].T @ present[kept])
        settled = np.abs(error) <= 6.0 * np.median(np.abs(error)) + 1e-12
        if np.array_equal(settled, kept) or np.count_nonzero(settled) < 2 * CLICK_ORDER:
            break
        kept = settled
    return error


# --- a tone -----------------------------------------------------------------------------------


@dataclass(frozen=True)
class Tone:
    """The strongest sinusoid: a cos(2 pi f n / fs + phase) at frame n.

    frequency_hz; level_db : 20 log10 a, a full-scale sine is 0 dBFS; phase_rad : at frame 0, -pi to pi;
    rest_db : RMS of everything else but a constant offset [dBFS]
    """

    frequency_hz: float
    level_db: float
    phase_rad: float
    rest_db: float


def tone(y: np.ndarray, rate_hz: float) -> Tone:
    """Frequency, level and phase of the strongest sinusoid of one channel, by least squares.

    Starts at the peak of a Hann spectrum, then Gauss-Newton on a cos + b sin + c with the frequency free.

    Raises : ValueError - more than one channel; silence; fewer than four periods, which fit anything
    """
    sound = _columns(y, least_frames=16)
    if sound.shape[1] != 1:
        raise ValueError(f"tone needs one channel, got {sound.shape[1]}: pass y[:, k]")
    sound = sound[:, 0] - np.mean(sound)
    frames = len(sound)
    spectrum = np.abs(np.fft.rfft(sound * np.hanning(frames), 4 * frames))
    omega = 2.0 * math.pi * np.argmax(spectrum[8:]) / (4 * frames) + 2.0 * math.pi * 8 / (4 * frames)
    if not np.any(sound) or omega * frames < 8.0 * math.pi:
        raise ValueError(f"tone needs a sinusoid of at least four periods, found none in {frames} frames: give a longer one")
    n = np.arange(frames) - 0.5 * (frames - 1)
    for _ in range(30):
        cosine, sine = np.cos(omega * n), np.sin(omega * n)
        flat = np.ones(frames)
        a, b, _c = np.linalg.lstsq(np.stack([cosine, sine, flat], axis=1), sound, rcond=None)[0]
        slope = n * (b * cosine - a * sine)
        found = np.linalg.lstsq(np.stack([cosine, sine, flat, slope], axis=1), sound, rcond=None)[0]
        omega += found[3]
        if abs(found[3]) < 1e-14:
            break
    rest = sound - np.stack([cosine, sine, flat], axis=1) @ found[:3]
    phase = math.atan2(-b, a) - omega * 0.5 * (frames - 1)
    return Tone(
        omega * rate_hz / (2.0 * math.pi),
        _db(math.hypot(a, b)),
        math.remainder(phase, 2.0 * math.pi),
        _db(math.sqrt(np.mean(rest**2))),
    )


def decay_s(y: np.ndarray, rate_hz: float, from_db: float = -5.0, to_db: float = -35.0) -> float:
    """Time for the ringing to fall 60 dB [s]: a line through the backward-integrated energy from from_db to to_db.

    The sound must begin with the ringing, and the energy of its last tenth must lie 20 dB below to_db, so that neither
    the cut end nor noise bends the line: at the defaults it must be about as long as the decay.

    Raises : ValueError - more than one channel; the last tenth too loud
    Source : ISO 3382-1, integrated impulse response method (from memory)
    """
    sound = _columns(y, least_frames=16)
    if sound.shape[1] != 1:
        raise ValueError(f"decay_s needs one channel, got {sound.shape[1]}: pass y[:, k]")
    energy = np.cumsum(sound[::-1, 0] ** 2)[::-1]
    fall_db = 10.0 * np.log10(np.maximum(energy, 1e-300) / max(energy[0], 1e-300))
    last_db = fall_db[9 * len(energy) // 10]
    if not last_db < to_db - 20.0:
        raise ValueError(f"last tenth must lie below {to_db - 20:g} dB of the whole, got {last_db:.1f} dB: record longer")
    begin, end = np.argmax(fall_db <= from_db), np.argmax(fall_db <= to_db)
    slope_db = np.polyfit(np.arange(begin, end + 1) / rate_hz, fall_db[begin : end + 1], 1)[0]
    return -60.0 / slope_db


# --- two recordings against each other --------------------------------------------------------

MATCH_FRAMES = 32
# so many frames of noise alike are the same place, never chance


@dataclass(frozen=True)
class Match:
    """How a recording follows its reference; frames are counted in the reference.

    lag_frames : recorded[n + lag_frames] is reference[n], up to the first gap, repeat or insertion
    gaps : (frame, count): the recording leaves out count frames from here
    repeats : (frame, count): before this frame the recording has the count frames before it once more
    inserted : (frame, count): before this frame the recording has count frames of something else
    differing : frames that are in their place but not the same
    """

    lag_frames: int
    gaps: tuple[tuple[int, int], ...]
    repeats: tuple[tuple[int, int], ...]
    inserted: tuple[tuple[int, int], ...]
    differing: np.ndarray

    @property
    def exact(self) -> bool:
        """The whole reference is there, in order, to the last digit of every sample (or within the tolerance)."""
        return not (self.gaps or self.repeats or self.inserted or len(self.differing))


def dropped_frames(reference: np.ndarray, recorded: np.ndarray, tolerance: float = 0.0) -> Match:
    """Find the reference in a recording and list where the two part. Use noise: in a tone many places look alike.

    The lag starts from the peak of the cross-correlation; after each fault the two are joined again where the next
    MATCH_FRAMES frames agree. What comes before and after the reference in the recording does not count.

    tolerance : largest difference of samples that still count as the same
    Raises : ValueError - other numbers of channels
    """
    wanted, found = _columns(reference), _columns(recorded)
    if wanted.shape[1] != found.shape[1]:
        raise ValueError(f"recorded must have {wanted.shape[1]} channels as the reference has, got {found.shape[1]}")
    order = np.argsort(found[:, 0], kind="stable")
    correlation = np.sum(fftconvolve(found, wanted[::-1], axes=0), axis=1)
    guess = int(np.argmax(correlation)) - len(wanted) + 1
    start = _rejoin(wanted, found, order, (0, 0), guess, tolerance)
    lag = guess if start is None else start[1] - start[0]
    gaps, repeats, inserted, differing = [], [], [], []
    if lag < 0:
        gaps.append((0, -lag))
    here, there = max(-lag, 0), max(lag, 0)
    while here < len(wanted):
        alike = _alike(wanted[here:], found[there:], tolerance)
        run = int(np.argmin(alike)) if not np.all(alike) else len(alike)
        here, there = here + run, there + run
        if here == len(wanted):
            break
        left = len(wanted) - here
        joined = _rejoin(wanted, found, order, (here, there), 0, tolerance)
        skip, extra = joined or (left, min(left, len(found) - there))
        both = min(skip, extra)
        differing.append(here + np.flatnonzero(~_alike(wanted[here : here + both], found[there : there + both], tolerance)))
        if skip > both:
            gaps.append((here + both, skip - both))
        elif extra > both:
            before = wanted[max(here - extra, 0) : here]
            again = both == 0 and len(before) == extra and np.all(_alike(before, found[there:], tolerance))
            (repeats if again else inserted).append((here + both, extra - both))
        here, there = here + skip, there + extra
    frames = np.concatenate([np.zeros(0, dtype=np.int64), *differing])
    return Match(lag, tuple(gaps), tuple(repeats), tuple(inserted), frames)


def _rejoin(
    wanted: np.ndarray, found: np.ndarray, order: np.ndarray, origin: tuple[int, int], near: int, tolerance: float
) -> tuple[int, int] | None:
    """Frames to skip in each, from ``origin`` on, so that the two agree again: least in ``wanted``, then nearest to ``near``.

    order : frames of ``found`` sorted by their first channel, so that a place is looked up rather than searched for
    """
    here, there = origin
    values = found[order, 0]
    for first in range(here, len(wanted) - MATCH_FRAMES + 1, MATCH_FRAMES // 2):
        low, high = np.searchsorted(values, [wanted[first, 0] - tolerance, np.nextafter(wanted[first, 0] + tolerance, np.inf)])
        places = order[low:high]
        places = places[(places >= there) & (places <= len(found) - MATCH_FRAMES)]
        for k in range(MATCH_FRAMES):
            places = places[np.all(np.abs(found[places + k] - wanted[first + k]) <= tolerance, axis=1)]
        if len(places):
            last = int(places[np.argmin(np.abs((places - there) - (first - here) - near))])
            back = _alike(wanted[here:first][::-1], found[there:last][::-1], tolerance)
            agreed = len(back) if np.all(back) else int(np.argmin(back))
            return first - here - agreed, last - there - agreed
    return None


def _alike(one: np.ndarray, other: np.ndarray, tolerance: float) -> np.ndarray:
    """Which frames agree, as far as both go."""
    common = min(len(one), len(other))
    return np.all(np.abs(one[:common] - other[:common]) <= tolerance, axis=1)


# --- shared -----------------------------------------------------------------------------------


def _columns(y: np.ndarray, least_frames: int = 1) -> np.ndarray:
    """The sound as (frames, channels) float64; ValueError for a wrong shape, too few frames, NaN or infinity."""
    sound = np.asarray(y, dtype=np.float64)
    if sound.ndim == 1:
        sound = sound[:, None]
    if sound.ndim != 2 or len(sound) < least_frames or sound.shape[1] < 1:
        raise ValueError(
            f"sound must be (frames,) or (frames, channels) of at least {least_frames} frames, "
            f"got shape {np.shape(y)}: give a longer stretch"
        )
    bad = np.flatnonzero(~np.all(np.isfinite(sound), axis=1))
    if len(bad):
        raise ValueError(f"sound must be finite, got NaN or infinity in {len(bad)} frames, first {bad[0]}: find out why")
    return sound


def _db(amplitude: float) -> float:
    return 20.0 * math.log10(amplitude) if amplitude > 0 else -math.inf
