"""Make the spoken passage that liveres carries: a microphone test and a short welcome in a hall.

    python benchmarks/make_speech.py [OUT]        OUT is liveres/data/speech.flac when not given

The words are our own. espeak-ng speaks each sentence at 22,050 Hz; the rest is fixed: pauses, a linear-phase
resampling to 48,000 Hz, a peak of -6 dBFS, a faint room noise so that no frame is digital silence, and dither to
16 bits, both from one seed. The same release of espeak-ng gives the same file.
"""

from __future__ import annotations

import argparse
import os
import shutil
import subprocess
import tempfile
from pathlib import Path

import numpy as np
import soundfile
from scipy.signal import firwin, lfilter, resample_poly

SENTENCES = (
    ("One, two. One, two.", 0.6),
    ("Can you hear me at the back?", 0.9),
    ("Good evening, and welcome to the Nether Quillham village meeting.", 0.5),
    ("Tonight: the footbridge, the orchard, and the new bell.", 0.7),
)
# words, and the pause after them [s]
LEAD_S = 0.4
VOICE = ("-v", "en-gb", "-s", "155", "-p", "40", "-g", "1")
# 155 words a minute and a gap between words: somebody who waits for the hall to answer

RATE_HZ = 48_000
SPOKEN_RATE_HZ = 22_050
UP, DOWN = 320, 147
# 48,000 / 22,050 in lowest terms
REACH_FRAMES = 64
# spoken frames the resampling filter reaches to either side: 0.2 dB down at 10.3 kHz, 45 dB at 11 kHz, gone at 11.3 kHz
PEAK = 10.0 ** (-6.0 / 20.0)
NOISE_RMS = 10.0 ** (-74.0 / 20.0)
NOISE_POLE = 0.95
# one pole at about 390 Hz: the low murmur of an empty hall, and little for the file to carry
SEED = 20_240_511
OUT = Path(__file__).resolve().parent.parent / "liveres" / "data" / "speech.flac"


def speak(words: str) -> np.ndarray:
    """One sentence from espeak-ng at 22,050 Hz, (frames,) float64, its silent ends cut off."""
    program = shutil.which("espeak-ng")
    if program is None:
        raise SystemExit("espeak-ng must be installed, found none: sudo apt install espeak-ng")
    with tempfile.TemporaryDirectory() as folder:
        spoken = Path(folder) / "spoken.wav"
        subprocess.run([program, *VOICE, "-z", "-w", spoken, words], check=True)
        sound, rate_hz = soundfile.read(spoken)
    if rate_hz != SPOKEN_RATE_HZ:
        raise SystemExit(f"espeak-ng must speak at {SPOKEN_RATE_HZ} Hz, got {rate_hz}: use a voice of that rate")
    loud = np.flatnonzero(np.abs(sound) > 1e-3)
    return sound[loud[0] : loud[-1] + 1]


def passage() -> np.ndarray:
    """The whole passage at 48,000 Hz, (frames,) float64, peak -6 dBFS, with its room."""
    pieces = [np.zeros(round(LEAD_S * SPOKEN_RATE_HZ))]
    for words, pause_s in SENTENCES:
        pieces += [speak(words), np.zeros(round(pause_s * SPOKEN_RATE_HZ))]
    low_pass = firwin(2 * REACH_FRAMES * UP + 1, 0.965 / UP, window=("kaiser", 9.0))
    sound = resample_poly(np.concatenate(pieces), UP, DOWN, window=low_pass)
    random = np.random.default_rng(SEED)
    room = lfilter([1.0 - NOISE_POLE], [1.0, -NOISE_POLE], random.standard_normal(len(sound)))
    sound = sound + room * (NOISE_RMS / np.sqrt(np.mean(room**2))) * np.max(np.abs(sound)) / PEAK
    sound *= PEAK / np.max(np.abs(sound))
    step = 2.0**-15
    return np.round(sound / step + random.random(len(sound)) - random.random(len(sound))) * step


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("out", nargs="?", type=Path, default=OUT, help="FLAC file to write (default: %(default)s)")
    out = parser.parse_args().out
    sound = passage()
    beside = out.with_name(out.name + ".part")
    soundfile.write(beside, sound, RATE_HZ, format="FLAC", subtype="PCM_16")
    os.replace(beside, out)
    print(f"{out}: {len(sound) / RATE_HZ:.2f} s, {out.stat().st_size / 1000:.0f} kB")


if __name__ == "__main__":
    main()
