"""What a rehearsal may be asked for: the rooms and sources there are, and the range of each quantity. Loads nothing heavy."""

from __future__ import annotations

from liveres.limits import Bound

ROOMS = {
    "meeting": "small meeting room, table microphone, loudspeaker on the wall",
    "stage": "small stage, vocal microphone, wedge at its foot",
    "hall": "village hall, lectern, loudspeaker on a stand",
    "gym": "school gym, lectern, loudspeaker high on the wall",
    "church": "stone church, pulpit, loudspeaker on a pillar",
}
SOURCES = {
    "speech": "a spoken microphone test, over and over",
    "music": "plucked notes, over and over",
    "noise": "steady white noise",
    "none": "nobody speaks",
}

SYSTEM_GAIN_DB = Bound(-120, 40, "dB", "0 dB is 6 dB below what a room bears without filters")
# +40 dB is far past every limit: enough to see what a howl does

DELAY_FRAMES = Bound(0, 48_000, "frames", "converters and digital links have some hundreds")
# a second at 48 kHz: later than any sound system

SEED = Bound(0, 999_999, "", "any whole number in the range will do")

IMPULSE_S = Bound(0, 10, "s", "cut it where it has died away")
# the longest halls and cathedrals have rung down 60 dB by then
