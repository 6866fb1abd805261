"""Make the impulse responses of the rooms that liveres ships, from their shape, their walls and a fixed seed.

    pip install pyroomacoustics
    python benchmarks/make_rooms.py [NAME ...]        all of them when none is given; into liveres/data/rooms/

Each is the way from one loudspeaker to one microphone: image sources for the first reflections, rays for the rest, then
what stands at the two ends (a loudspeaker that passes nothing below 80 Hz and, seen from its side, less above 6 kHz).
Levels do not matter here: the program scales each room by what it bears. The end is cut where the response has fallen
60 dB or at the length given, under a fade of 50 ms; samples are 24-bit integers in FLAC.
"""

from __future__ import annotations

import argparse
import os
from dataclasses import dataclass
from pathlib import Path

import numpy as np
import pyroomacoustics as pra
import soundfile
from scipy.signal import butter, sosfilt

RATE_HZ = 48_000
OUT = Path(__file__).resolve().parent.parent / "liveres" / "data" / "rooms"
PEAK = 0.5
HIGH_PASS_HZ, LOW_PASS_HZ = 80.0, 6000.0
FADE_S = 0.05
OCTAVES_HZ = [125, 250, 500, 1000, 2000, 4000, 8000]


@dataclass(frozen=True)
class Plan:
    """A rectangular room and what stands in it.

    size_m : length, width, height
    loudspeaker_m, microphone_m : places as (along, across, up)
    absorbed : share of energy lost at the walls, an octave each from 125 Hz to 8 kHz
    scattered : share of it that is thrown in all directions
    longest_s : where the response is cut at the latest
    """

    size_m: tuple[float, float, float]
    loudspeaker_m: tuple[float, float, float]
    microphone_m: tuple[float, float, float]
    absorbed: tuple[float, ...]
    scattered: float
    longest_s: float
    seed: int


PLANS = {
    # plasterboard, carpet and a table for six; the loudspeaker beside the picture, the microphone on the table
    "meeting": Plan(
        (6.2, 4.3, 2.7), (0.3, 2.9, 1.6), (3.1, 2.0, 0.85), (0.15, 0.17, 0.19, 0.21, 0.23, 0.25, 0.27), 0.3, 0.8, seed=11
    ),
    # a low stage with drapes; a wedge on the floor a metre and a half before the singer
    "stage": Plan(
        (9.4, 7.1, 4.2), (5.6, 3.3, 0.35), (4.3, 3.6, 1.55), (0.14, 0.20, 0.28, 0.34, 0.38, 0.40, 0.42), 0.3, 0.9, seed=12
    ),
    # wooden floor, plastered walls, curtains; lectern at the front, loudspeaker on a stand beside it
    "hall": Plan(
        (17.5, 9.2, 5.1), (1.8, 7.4, 2.2), (2.6, 3.7, 1.25), (0.14, 0.15, 0.16, 0.17, 0.18, 0.20, 0.22), 0.25, 1.2, seed=13
    ),
    # painted blocks and a hard floor; the loudspeaker under the roof of the long wall
    "gym": Plan(
        (26.0, 15.0, 7.3), (9.0, 0.5, 5.4), (10.5, 5.0, 1.4), (0.13, 0.13, 0.14, 0.15, 0.16, 0.18, 0.20), 0.2, 1.4, seed=14
    ),
    # stone, pews and people; the loudspeaker on a pillar near the pulpit
    "church": Plan(
        (27.0, 12.5, 9.8), (6.2, 3.1, 2.9), (3.4, 4.6, 2.1), (0.12, 0.12, 0.13, 0.14, 0.15, 0.17, 0.20), 0.25, 1.5, seed=15
    ),
}


def make(plan: Plan) -> np.ndarray:
    """The impulse response, (frames,) float64."""
    pra.random.seed(plan.seed)
    np.random.seed(plan.seed)
    pra.libroom.set_rng_seed(plan.seed)
    walls = pra.Material(
        {"description": "walls", "coeffs": list(plan.absorbed), "center_freqs": OCTAVES_HZ},
        {"description": "walls", "coeffs": [plan.scattered]},
    )
    room = pra.ShoeBox(plan.size_m, fs=RATE_HZ, materials=walls, max_order=3, ray_tracing=True, air_absorption=True)
    room.set_ray_tracing(n_rays=40_000, receiver_radius=0.3)
    room.add_source(plan.loudspeaker_m)
    room.add_microphone(plan.microphone_m)
    room.compute_rir()
    impulse = np.asarray(room.rir[0][0], np.float64)
    # the library's interpolation puts every arrival so much later
    impulse = impulse[pra.constants.get("frac_delay_length") // 2 :]
    impulse = sosfilt(butter(2, HIGH_PASS_HZ, "highpass", fs=RATE_HZ, output="sos"), impulse)
    impulse = sosfilt(butter(1, LOW_PASS_HZ, fs=RATE_HZ, output="sos"), impulse)
    return cut(impulse, plan.longest_s)


def cut(impulse: np.ndarray, longest_s: float) -> np.ndarray:
    """The response up to where it has fallen 60 dB or to its longest, faded out."""
    energy = np.cumsum(impulse[::-1] ** 2)[::-1]
    frames = min(int(np.flatnonzero(energy > 1e-6 * energy[0])[-1]) + 1, round(longest_s * RATE_HZ))
    fade = round(FADE_S * RATE_HZ)
    impulse = impulse[:frames].copy()
    impulse[-fade:] *= 0.5 + 0.5 * np.cos(np.pi * np.arange(fade) / fade)
    return impulse * (PEAK / np.max(np.abs(impulse)))


def main() -> None:
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("names", nargs="*", metavar="NAME", help=f"of {', '.join(PLANS)}")
    for name in parser.parse_args().names or PLANS:
        impulse = make(PLANS[name])
        out = OUT / f"{name}.flac"
        beside = out.with_name(out.name + ".part")
        soundfile.write(beside, impulse, RATE_HZ, format="FLAC", subtype="PCM_24")
        os.replace(beside, out)
        print(f"{out}: {len(impulse) / RATE_HZ:.2f} s, {out.stat().st_size / 1000:.0f} kB")


if __name__ == "__main__":
    main()
