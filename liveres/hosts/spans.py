"""How long a run may last. Without the weight of the hosts themselves, for the command line's sake."""

from __future__ import annotations

from liveres.limits import Bound

TAIL_S = Bound(0, 600, "s", "60 s outlasts everything a preset can ring")
# ten of the longest permitted decays

RUN_S = Bound(0.1, 604_800, "s", "leave it out to run until stopped")
# a week
