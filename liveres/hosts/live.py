"""``Live``: the engine on a running PortAudio stream. The sound is made by native code; Python only steers.

Thread: control. The audio thread runs ``kernels.callback`` and nothing else.
"""

from __future__ import annotations

import atexit
import contextlib
import os
import threading
import time
from types import ModuleType

import numpy as np

from liveres import limits
from liveres.engine.control import Control
from liveres.engine.mailbox import Mailbox
from liveres.engine.moves import Move
from liveres.engine.settings import Preset
from liveres.errors import DeviceError
from liveres.hosts.portaudio import check_device, import_sounddevice
from liveres.kernels import callback as c
from liveres.kernels import state as s

LOST_S = 1.0
# without a callback for so long, and for two blocks at least, a device counts as gone
LATE_S = 0.1
# a command waits for the next callback; this long and two blocks is late even for a system that hiccups
WATCH_S = 0.1
CLOSE_S = 2.0
# PortAudio can wait ten minutes for a sound server that has died
REALTIME_PRIORITY = 20
# above ordinary work, below what the kernel and a sound server use (commonly 50 and up)


_NEVER_FREED: list[Live] = []


class Live(Control):
    """A preset on a sound device, muted until ``unmute``. Use it as a context: entering starts the sound, leaving fades it out.

    preset : Preset
    device : None for the default, a number or (part of) a name, or a pair of these for input and output
    block_frames : int [frames], 1 to 65536; the driver may ask for others at times
    rate_hz : float [Hz], as the device offers
    channels : int, 1 to 32, in and out
    realtime : bool; ask the system for real-time scheduling of the audio thread
    Raises : ParameterError - as ``Control``; DeviceError - no PortAudio, no such device, rate or channel count refused
    """

    def __init__(
        self,
        preset: Preset,
        device: object = None,
        block_frames: int = 64,
        rate_hz: float = 48_000,
        channels: int = 2,
        realtime: bool = True,
    ):
        self._running = False
        self.block_frames = limits.check_whole("block_frames", block_frames, limits.BLOCK_FRAMES)
        self.device = device
        super().__init__(preset, rate_hz, channels)
        self._late_frames = round(LATE_S * self.rate_hz) + 2 * self.block_frames
        self._ask_realtime = realtime
        self._realtime = (False, "the stream is not running")
        self._journal: list[tuple[int, int | None, str, dict, float]] = []
        self._lost: str | None = None
        self._stream = None
        self._started = False
        self._mailbox = Mailbox()
        self._stats = np.zeros(1, c.STATS)
        self._x = np.zeros((s.CHUNK, self.channels))
        self._y = np.zeros((s.CHUNK, self.channels))
        self._ports = self._make_ports()
        self.mute(ramp_s=0.0)

    # --- running ---------------------------------------------------------------------------------

    def start(self) -> None:
        """Open the device and start the sound, muted unless ``unmute`` came first. Once only: a Live is not used again.

        Raises : DeviceError - the device is missing or refuses; it has been started before
        """
        if self._started:
            raise DeviceError("a Live must be started once, got a second start: make a new one")
        self._started = True
        sd = import_sounddevice()
        check_device(self.device, self.channels)
        try:
            self._stream = sd._StreamBase(
                "duplex",
                samplerate=self.rate_hz,
                blocksize=self.block_frames,
                device=self.device,
                channels=self.channels,
                dtype="float32",
                latency="low",
                callback=sd._ffi.cast("PaStreamCallback*", c.audio_callback.address),
                userdata=sd._ffi.cast("void*", self._ports.ctypes.data),
                wrap_callback=None,
            )
            self._running = True
            self._stream.start()
        except (sd.PortAudioError, ValueError) as error:
            self._running = False
            if self._stream is not None:
                self._stream.close()
                self._stream = None
            raise DeviceError(self._refusal(sd, error)) from None
        self._realtime = self._get_realtime()
        threading.Thread(target=self._watch, name="liveres-watch", daemon=True).start()

    def close(self) -> bool:
        """Fade out and close the device; False when the sound system did not let go of it in time."""
        if self._stream is None:
            return True
        if self.lost is None:
            self.mute()
            self._wait_for_fade()
        self._running = False
        stream, self._stream = self._stream, None
        failures: list[str] = []

        def shut() -> None:
            try:
                stream.abort(ignore_errors=False)
                stream.close(ignore_errors=False)
            except Exception as error:
                failures.append(str(error))

        closing = threading.Thread(target=shut, name="liveres-close", daemon=True)
        closing.start()
        closing.join(CLOSE_S)
        if closing.is_alive():
            # the sound system may yet call back, so the memory must outlive this object
            _NEVER_FREED.append(self)
            # leaving the interpreter would wait for the same dead server
            atexit.unregister(import_sounddevice()._exit_handler)
            return False
        if failures and self._lost is None:
            raise DeviceError(f"the device must close cleanly, it said {failures[0]}: check the sound system")
        return True

    def __enter__(self) -> Live:
        self.start()
        return self

    def __exit__(self, *exception: object) -> None:
        self.close()

    @property
    def lost(self) -> str | None:
        """None while the device plays; else what happened to it."""
        return self._lost

    @property
    def latency_s(self) -> tuple[float, float]:
        """Input and output latency [s] as the sound system states them; look-ahead comes on top."""
        return tuple(self._stream.latency) if self._stream is not None else (0.0, 0.0)

    # --- steering --------------------------------------------------------------------------------

    def retune(self, name: str, *, ramp_s: float = limits.RETUNE_S, **changes: object) -> None:
        """As ``Control.retune``; noted for ``moves``."""
        with self._steering:
            super().retune(name, ramp_s=ramp_s, **changes)
            acted = None if self._running else self.frame
            self._journal.append((self._sequence, acted, name, changes, ramp_s))

    def moves(self) -> tuple[Move, ...]:
        """Every retune so far with the exact frame it acted on; those still on their way are left out.

        Filters added or removed while it runs, mutes and resets are not among them: moves files know retunes only.
        """
        done = []
        with self._steering:
            for sequence, acted, name, changes, ramp_s in self._journal:
                frame = self._mailbox.frame_of(sequence) if acted is None else acted
                if frame is not None:
                    done += [Move(frame, name, key, value, ramp_s) for key, value in changes.items()]
        return tuple(done)

    def counters(self) -> dict:
        """How the audio thread fares.

        Returns : dict
            callbacks : int
            output_underflows, input_overflows : int, reported by the system; some systems report both for any hitch
            worst_callback_s, mean_callback_s, period_s : float [s]; period is the block's own duration
            realtime : bool; realtime_why : str
        """
        stats = self._stats[0]
        calls = int(stats["callbacks"])
        return {
            "callbacks": calls,
            "output_underflows": int(stats["output_underflows"]),
            "input_overflows": int(stats["input_overflows"]),
            "worst_callback_s": int(stats["worst_ns"]) / 1e9,
            "mean_callback_s": int(stats["total_ns"]) / 1e9 / max(calls, 1),
            "period_s": int(stats["frames_most"] or self.block_frames) / self.rate_hz,
            "realtime": self._realtime[0],
            "realtime_why": self._realtime[1],
        }

    def _send(self, rows: list[list[float]]) -> None:
        with self._steering:
            if self._running:
                self._mailbox.send(rows)
            else:
                super()._send(rows)

    # --- inner workings ----------------------------------------------------------------------------

    def _make_ports(self) -> np.ndarray:
        mailbox = self._mailbox
        arrays = (
            *self.memory.arrays, mailbox.mail, mailbox.counts, mailbox.rows, mailbox.log, self._stats, self._x, self._y,
        )  # fmt: skip
        for array in arrays:
            if array.dtype.names is None:
                # so that every page is there before the audio thread needs it
                array += 0
        ports = np.zeros(1, c.PORTS)
        for name, array in zip(c.PORT_NAMES, arrays, strict=True):
            ports[name] = array.ctypes.data
        ports["channel_count"] = self.channels
        ports["look_size"] = self.memory.look.shape[2]
        return ports

    def _get_realtime(self) -> tuple[bool, str]:
        if not hasattr(os, "sched_getscheduler"):
            return False, "this system schedules audio by itself and does not say how"
        deadline = time.monotonic() + LOST_S
        while not self._stats["callbacks"][0] and time.monotonic() < deadline:
            time.sleep(0.001)
        thread = int(self._stats["thread"][0])
        if not thread:
            return False, "no callback has come yet"
        fifo = (os.SCHED_FIFO, os.SCHED_RR)
        try:
            if os.sched_getscheduler(thread) in fifo:
                return True, "given by the sound system"
            if not self._ask_realtime:
                return False, "not asked for"
            os.sched_setscheduler(thread, os.SCHED_FIFO, os.sched_param(REALTIME_PRIORITY))
            return True, f"granted at priority {REALTIME_PRIORITY}"
        except (PermissionError, ProcessLookupError):
            return False, "the system refused it: allow rtprio for your user (see limits.d(5)), or use JACK in real-time mode"

    def _watch(self) -> None:
        """Notice that the device has gone: callbacks stop coming, or the stream says it is over."""
        still_s = max(LOST_S, 2 * self.block_frames / self.rate_hz)
        calls, since = -1, time.monotonic()
        while self._running and self._lost is None:
            stream = self._stream
            now = int(self._stats["callbacks"][0])
            if now != calls:
                calls, since = now, time.monotonic()
            over = stream is not None and not stream.active
            if self._running and (over or time.monotonic() - since > still_s):
                what = "ended the stream" if over else f"has asked for no sound for {still_s:.1f} s"
                self._lost = f"the device {what} after {calls} callbacks: check its cable and the sound system, then start again"
                return
            time.sleep(WATCH_S)

    def _wait_for_fade(self) -> None:
        sequence, deadline = self._sequence, time.monotonic() + 0.5
        while self._mailbox.taken < sequence and time.monotonic() < deadline and self._lost is None:
            time.sleep(0.001)
        with contextlib.suppress(Exception):
            time.sleep(limits.MUTE_S + sum(self.latency_s))

    def _refusal(self, sd: ModuleType, error: Exception) -> str:
        pair = self.device if isinstance(self.device, (tuple, list)) else (self.device, self.device)
        if "Invalid sample rate" in str(error):
            usual = sd.query_devices(pair[1], "output")["default_samplerate"]
            return f"rate_hz must be one the device runs at, got {self.rate_hz:g}: its usual one is {usual:g}"
        return (
            f"the device must open with {self.channels} channels in and out, rate_hz {self.rate_hz:g} and blocks of "
            f"{self.block_frames} frames, it said {error}: close other programs that hold it, or see liveres devices"
        )
