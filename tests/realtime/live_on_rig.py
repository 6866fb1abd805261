"""A program for the tests: a live session on a rig, steered at random while it runs; prints what it did as JSON."""

from __future__ import annotations

import json
import sys
import time

import numpy as np

from liveres import Live, load_preset
from liveres.engine.moves import save_moves


def main(device: str, block_frames: int, frames: int, preset_path: str, moves_path: str) -> None:
    """Open the gate before the first frame, retune until ``frames`` are played, write the moves."""
    rng = np.random.default_rng(7)
    live = Live(load_preset(preset_path), device=device, block_frames=block_frames, realtime=False)
    live.unmute(ramp_s=0.0)
    with live:
        while live.frame < frames:
            name = str(rng.choice([one.name for one in live.filters]))
            live.retune(name, centre_hz=float(rng.uniform(80, 8000)), ramp_s=float(rng.choice([0.0, 0.003, 0.1])))
            if rng.random() < 0.3:
                live.retune(name, enabled=bool(rng.random() < 0.5))
            time.sleep(0.001)
        counters = live.counters()
        moves = live.moves()
    save_moves(moves, moves_path)
    print(json.dumps({"counters": counters, "moves": len(moves), "first": moves[0].frame, "last": moves[-1].frame}))


if __name__ == "__main__":
    main(sys.argv[1], int(sys.argv[2]), int(sys.argv[3]), sys.argv[4], sys.argv[5])
