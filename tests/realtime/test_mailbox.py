"""The callback driven by hand from a native thread, while Python floods it with commands: nothing lost, nothing torn."""

from __future__ import annotations

import ctypes
import sys
import threading

import numpy as np
import pytest

from liveres import Notch, Preset, Processor, Resonator
from liveres.hosts.live import Live
from liveres.kernels import callback as c
from liveres.kernels import state as s

CALLBACK = ctypes.CFUNCTYPE(
    ctypes.c_int, ctypes.c_void_p, ctypes.c_void_p, ctypes.c_ulong, ctypes.c_void_p, ctypes.c_ulong, ctypes.c_void_p
)


class HandDriven(Live):
    """A ``Live`` whose audio thread is the test: blocks go in and come out by hand."""

    def __init__(self, *arguments, **keywords):
        super().__init__(*arguments, **keywords)
        self._running = True
        self._call = CALLBACK(c.audio_callback.address)

    def drive(self, x: np.ndarray | None, frames: int = 64, flags: int = 0) -> np.ndarray:
        y = np.full((frames, self.channels), 7.0, np.float32)
        source = None if x is None else np.ascontiguousarray(x, np.float32).ctypes.data
        result = self._call(source, y.ctypes.data, frames, None, flags, self._ports.ctypes.data)
        assert result == 0
        return y


def test_a_hand_driven_callback_equals_the_processor_to_the_bit():
    """One kernel serves both; the callback adds nothing and loses nothing, for odd block sizes too."""
    preset = Preset([Notch("n", 700, -20, q=9), Resonator("r", 333, -3, decay_s=3.0)], lookahead_s=0.001)
    live, p = HandDriven(preset), Processor(preset)
    live.unmute(ramp_s=0.01)
    p.mute(ramp_s=0)
    p.unmute(ramp_s=0.01)
    rng = np.random.default_rng(0)
    for frames in (1, 64, 480, 7, 4096, 33, 0, 64):
        x = rng.standard_normal((frames, 2)).astype(np.float32)
        assert live.drive(x, frames).tobytes() == p.process(x).tobytes()
        live.retune("n", centre_hz=float(rng.uniform(50, 9000)))
        p.retune("n", centre_hz=live.filters[0].centre_hz)


def test_without_an_input_the_callback_plays_silence_and_resonance():
    """A driver may pass no input at all."""
    live = HandDriven(Preset())
    live.unmute(ramp_s=0)
    assert not live.drive(None).any()


def test_a_live_host_starts_muted():
    """Nobody's ears are the first meter."""
    live = HandDriven(Preset(guard=False))
    assert not live.drive(np.ones((64, 2))).any()
    live.unmute()
    faded = np.concatenate([live.drive(np.full((64, 2), 0.5)) for _ in range(760)])[:, 0]
    assert (np.diff(faded[:47_999]) > 0).all() and (faded[48_000:] == 0.5).all()


def test_flags_of_the_system_are_counted():
    """An engineer must see hitches that the ear took for something else."""
    live = HandDriven(Preset())
    for flags in (0, 1, 2, 4, 4, 8, 2 | 4):
        live.drive(None, flags=flags)
    counters = live.counters()
    assert (counters["callbacks"], counters["input_overflows"], counters["output_underflows"]) == (7, 2, 3)
    assert 0 < counters["worst_callback_s"] < 1
    assert counters["period_s"] == pytest.approx(64 / 48_000)


def test_everything_sent_at_once_acts_before_the_same_frame():
    """A chord is retuned together, not note by note."""
    filters = [Resonator(f"r{k}", 100 + 10 * k, -40, decay_s=0.5) for k in range(200)]
    live = HandDriven(Preset(filters))
    live.drive(None)
    for k in range(200):
        live.retune(f"r{k}", centre_hz=300.0 + 10 * k)
    live.drive(None)
    assert {move.frame for move in live.moves()} == {64} and len(live.moves()) == 200


def test_a_flood_of_commands_loses_none_and_tears_none():
    """The audio thread takes what it finds, at its own pace; the last word must win and each count once."""
    live = HandDriven(Preset([Notch("n", 1000, -12, q=10), Resonator("r", 500, -20, decay_s=1.0)]))
    stop = threading.Event()
    torn = []
    usual_s = sys.getswitchinterval()
    sys.setswitchinterval(1e-5)

    def audio() -> None:
        while not stop.is_set():
            live.drive(None)
            real, imag = live.memory.lanes[0, s.REAL_END], live.memory.lanes[0, s.IMAG_END]
            omega, decay = live.memory.lanes[0, s.OMEGA_END], live.memory.lanes[0, s.DECAY_END]
            if abs(np.hypot(real, imag) - np.exp(-decay)) > 1e-12 or not 0 < omega < np.pi:
                torn.append((real, imag, omega, decay))

    thread = threading.Thread(target=audio)
    thread.start()
    rng = np.random.default_rng(1)
    for _ in range(5000):
        live.retune("n", centre_hz=float(rng.uniform(50, 9000)), q=float(rng.uniform(1, 100)), ramp_s=0.001)
    stop.set()
    thread.join()
    sys.setswitchinterval(usual_s)
    live.drive(None)
    moves = live.moves()
    assert len(moves) == 2 * 5000 and torn == []
    frames = [move.frame for move in moves]
    assert frames == sorted(frames) and len(set(frames)) > 50
    section = live.filters[0].section(48_000)
    assert live.memory.lanes[0, s.REAL_END] == section.real and live.memory.lanes[0, s.OMEGA_END] == section.omega


def test_a_stopped_audio_thread_is_said_when_its_mailbox_is_full(monkeypatch):
    """Commands are kept while there is room; after that the control side says why it cannot go on."""
    from liveres.engine import mailbox
    from liveres.errors import DeviceError

    monkeypatch.setattr(mailbox, "PATIENCE_S", 0.05)
    box = mailbox.Mailbox()
    rows = [[float(k + 1)] + [0.0] * (s.COMMAND_FIELDS - 1) for k in range(c.MAIL_ROWS)]
    box.send(rows)
    with pytest.raises(DeviceError, match="the audio thread must take its commands, 40000 are waiting"):
        box.send(rows[:1])


def test_a_mute_is_not_lost_beside_another_thread_that_steers():
    """The mute key works even when something else is busy adding and removing filters."""
    usual_s = sys.getswitchinterval()
    sys.setswitchinterval(1e-6)
    try:
        for _ in range(40):
            live = HandDriven(Preset(guard=False))
            live.unmute(ramp_s=0)
            live.drive(np.full((64, 2), 0.5))

            def fuss(live=live) -> None:
                for k in range(30):
                    live.add(Notch(f"n{k}", 1000, -3, q=5))
                    live.meters()
                    live.remove(f"n{k}")

            other = threading.Thread(target=fuss)
            other.start()
            live.mute()
            while other.is_alive():
                live.drive(np.full((64, 2), 0.5))
            other.join()
            for _ in range(10):
                last = live.drive(np.full((64, 2), 0.5))
            assert not last.any()
    finally:
        sys.setswitchinterval(usual_s)


def test_a_retune_before_the_start_is_noted_at_frame_0():
    """Moves of a session must say when each acted, those made while it was being set up as well."""
    live = HandDriven(Preset([Notch("n", 1000, -12, q=10)]))
    live._running = False
    live.retune("n", centre_hz=1100.0)
    live._running = True
    live.drive(None)
    live.retune("n", centre_hz=1200.0)
    live.drive(None)
    assert [(move.frame, move.value) for move in live.moves()] == [(0, 1100.0), (64, 1200.0)]
