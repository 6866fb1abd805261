"""Files on the command line: what is asked of them early, and that ``check`` asks what the engine will ask."""

import pytest
from unit.sounds import HALL, noise, write

from liveres import cli
from liveres.engine.moves import Move, save_moves
from liveres.engine.processor import Processor
from liveres.engine.settings import Notch, Preset
from liveres.engine.watch import Watch
from liveres.errors import ParameterError
from liveres.presets import save_preset


def test_moves_are_judged_at_the_rate_of_the_sound_they_play_on(tmp_path, monkeypatch, capsys):
    """30 kHz is legal in a file at 96 kHz, whatever rate the preset was made at, and not in one at 48 kHz."""
    monkeypatch.chdir(tmp_path)
    save_preset(HALL, "hall.toml")
    save_moves([Move(100, "hum", "centre_hz", 30_000.0)], "moves.csv")
    write("fast.wav", noise(9600), rate_hz=96_000)
    write("usual.wav", noise(4800))
    options = ["--preset", "hall.toml", "--moves", "moves.csv", "--quiet"]
    assert cli.main(["render", "fast.wav", "out.wav", *options]) == 0
    assert cli.main(["render", "usual.wav", "no.wav", *options]) == 2
    assert "moves.csv:2: centre_hz: filter 'hum': centre_hz must be from 10 to 23520 Hz" in capsys.readouterr().err
    assert cli.main(["render", "fast.wav", "-o", "many", *options]) == 0


UNPLAYABLE = [
    (Preset([Notch("n", 100, -3, q=9)], watch=Watch()), "watch must be None, since this release cannot listen for howl"),
    (Preset(trim=True, dry_db=0.0, ceiling_db=-1.0), "trim must have room under the ceiling"),
    (Preset(trim=True, input_db=6.0, dry_db=-7.0, ceiling_db=-1.0), "trim must have room under the ceiling"),
]


@pytest.mark.parametrize("preset, message", UNPLAYABLE)
def test_check_refuses_what_the_engine_will_refuse(tmp_path, monkeypatch, capsys, preset, message):
    """OK in the afternoon must not be an error in the evening."""
    monkeypatch.chdir(tmp_path)
    save_preset(preset, "p.toml")
    with pytest.raises(ParameterError) as caught:
        Processor(preset)
    assert message in str(caught.value)
    assert cli.main(["check", "p.toml"]) == 2
    assert capsys.readouterr().err == f"liveres: p.toml: {caught.value}\n"


def test_check_passes_a_trim_that_has_room(tmp_path, monkeypatch, capsys):
    """The other side of the bound."""
    monkeypatch.chdir(tmp_path)
    preset = Preset(trim=True, dry_db=-1.001, ceiling_db=-1.0)
    save_preset(preset, "p.toml")
    Processor(preset)
    assert cli.main(["check", "p.toml"]) == 0
    assert capsys.readouterr().out == "p.toml: OK, preset: 0 notches, 0 resonators, 48000 Hz\n"
