"""The rigs carry sound to the bit through a real PortAudio stream, can be killed, and clean up after themselves."""

from __future__ import annotations

import sys
import time
from pathlib import Path

import numpy as np
import pytest

from tools import copy_through, meters, rigs

PROGRAM = (sys.executable, copy_through.__file__)
NOISE = np.random.default_rng(23).uniform(-1, 1, (96_000, 2)).astype(np.float32)
ENOUGH_FRAMES = len(NOISE) + 16_384
# the sound, and more than any buffer on the way


# --- ALSA -------------------------------------------------------------------------------------


@pytest.mark.parametrize("block_frames", [64, 480, 1024])
def test_the_alsa_rig_carries_sound_to_the_bit_and_then_silence(alsa_rig, block_frames):
    """Comparing a live stream with an offline render to the bit rests on this."""
    alsa_rig.play(NOISE)
    ended = alsa_rig.run([*PROGRAM, alsa_rig.device, str(block_frames), str(ENOUGH_FRAMES)])
    assert (ended.returncode, ended.stdout) == (0, "ready\n"), ended.stderr
    recorded = alsa_rig.recorded()
    match = meters.dropped_frames(NOISE, recorded)
    assert match.exact and 0 <= match.lag_frames <= 8 * 1024
    assert not np.any(recorded[: match.lag_frames]) and not np.any(recorded[match.lag_frames + len(NOISE) :])


def test_the_alsa_rig_interrupts_a_program_that_would_run_for_ever(alsa_rig):
    """The live command runs until Ctrl-C, and must be testable as it is."""
    alsa_rig.play(NOISE)
    ended = alsa_rig.run_until([*PROGRAM, alsa_rig.device, "256"], ENOUGH_FRAMES)
    assert ended.returncode == 0, ended.stderr
    assert meters.dropped_frames(NOISE, alsa_rig.recorded(ENOUGH_FRAMES)).exact


def test_the_alsa_rig_does_not_hand_out_the_sound_of_an_earlier_run(alsa_rig):
    """A test must not pass on what the last one left behind."""
    for sound in (NOISE, -NOISE[:5000]):
        alsa_rig.play(sound)
        alsa_rig.run([*PROGRAM, alsa_rig.device, "256", str(ENOUGH_FRAMES)])
        recorded = alsa_rig.recorded()
        assert meters.dropped_frames(sound, recorded).exact
    assert not np.any(recorded[meters.dropped_frames(sound, recorded).lag_frames + len(sound) :])


# --- JACK -------------------------------------------------------------------------------------


@pytest.fixture
def copying(jack_server):
    """The copy-through program on the JACK server of the test, its stream running."""
    command = [*PROGRAM, "system", str(jack_server.period_frames)]
    with rigs.running(command, jack_server.environment, "ready\n") as child:
        yield child


def test_the_jack_rig_carries_sound_to_the_bit_when_freewheeling(copying, jack_rig):
    """A second path through PortAudio, so that no finding rests on one driver."""
    jack_rig.patch("PortAudio")
    for sound in (NOISE, NOISE[::-1]):
        match = meters.dropped_frames(sound, jack_rig.play(sound))
        assert match.exact and match.lag_frames % 1024 == 0


def test_the_jack_rig_is_exact_at_the_shortest_period_of_a_real_time_server():
    """Live use is at 64 frames; where real time is refused the server goes on without."""
    with rigs.JackServer(period_frames=64, realtime=True) as server:
        with rigs.running([*PROGRAM, "system", "64"], server.environment, "ready\n"), rigs.JackRig(server) as rig:
            rig.patch("PortAudio")
            match = meters.dropped_frames(NOISE, rig.play(NOISE))
    assert match.exact and match.lag_frames % 64 == 0


def test_the_jack_rig_plays_in_time_when_not_freewheeling(copying, jack_rig):
    """Latency and pacing are measured this way; a busy machine may lose frames then, so exactness is not asked."""
    jack_rig.patch("PortAudio")
    began_s = time.monotonic()
    match = meters.dropped_frames(NOISE[:24_000], jack_rig.play(NOISE[:24_000], tail_frames=8192, freewheel=False))
    assert time.monotonic() - began_s > 0.9 * (24_000 + 8192) / rigs.RATE_HZ
    assert match.lag_frames > 0


def test_a_patch_cuts_the_links_that_join_by_themselves(copying, jack_rig):
    """A stream still joined to the dummy driver would hear two sources at once."""
    jack_rig.patch("PortAudio")
    links = {
        (port.name, other.name)
        for port in jack_rig.client.get_ports("^PortAudio:")
        for other in jack_rig.client.get_all_connections(port)
    }
    assert links == {
        ("PortAudio:in_0", "rig:o0"), ("PortAudio:in_1", "rig:o1"), ("PortAudio:out_0", "rig:i0"), ("PortAudio:out_1", "rig:i1"),
    }  # fmt: skip


def test_a_killed_server_is_lost_to_the_stream_at_once(copying, jack_server, jack_rig):
    """Device loss can be tested with a real stream: it sees its server go within seconds."""
    assert jack_server.alive
    jack_server.kill()
    assert not jack_server.alive
    assert copying.wait(10) == copy_through.LOST


def test_servers_leave_nothing_behind_even_when_killed_more_often_than_the_register_holds():
    """JACK's register has eight places, and a place of a killed server is not given to another name."""
    names = []
    for _ in range(9):
        with rigs.JackServer() as server, rigs.JackRig(server):
            names.append(server.name)
            server.kill()
    left = [path.name for path in Path("/dev/shm").iterdir() for name in names if name in path.name]
    assert left == [] and len(set(names)) == 9


def test_a_server_that_cannot_start_says_why(monkeypatch):
    """A wrong setting must not look like a lost device."""
    server = rigs.JackServer(period_frames=-1)
    with pytest.raises(AssertionError, match="JACK server must stay up, ended at once: "):
        server.__enter__()


def test_a_program_that_does_not_get_ready_fails_with_its_own_words():
    """The reason is in what the program wrote, not in the rig."""
    command = [sys.executable, "-c", "print('no such device'); raise SystemExit(4)"]
    with pytest.raises(AssertionError, match="must write 'ready', ended with 4: no such device"):
        rigs.running(command, {}, "ready").__enter__()


# --- policy -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    ("environment", "outcome"),
    [({}, "Skipped"), ({"CI": "false"}, "Skipped"), ({"CI": "true"}, "Failed"), ({"LIVERES_REQUIRE_JACK": "1"}, "Failed")],
)
def test_a_missing_part_skips_a_test_on_a_desk_and_fails_it_in_ci(monkeypatch, environment, outcome):
    """A skipped test is green: in CI it would hide that nothing was tested."""
    for name in ("CI", "LIVERES_REQUIRE_JACK"):
        monkeypatch.delenv(name, raising=False)
    for name, value in environment.items():
        monkeypatch.setenv(name, value)
    monkeypatch.setenv("PATH", "")
    with pytest.raises({"Skipped": pytest.skip.Exception, "Failed": pytest.fail.Exception}[outcome]) as ended:
        rigs.need("jackd")
    assert str(ended.value) == "jackd must be installed for this test: sudo apt install jackd2"


def test_waiting_ends_with_a_failure_that_names_what_did_not_come():
    """A rig that hangs must say on what."""
    with pytest.raises(AssertionError, match=r"snow must come within 0\.02 s, has not"):
        rigs.wait_until(lambda: False, 0.02, "snow")
