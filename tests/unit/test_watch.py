"""Settings of the howl watch are checked, and survive a preset file; the engine says that it cannot act on them."""

from __future__ import annotations

import pytest

from liveres import FileError, Notch, ParameterError, Preset, Processor, Watch, load_preset, save_preset


@pytest.mark.parametrize(
    ("field", "wrong"),
    [("max_notches", 0), ("max_notches", 129), ("max_notches", 2.5), ("deepest_db", 0.0), ("bandwidth_oct", float("nan"))],
)
def test_a_setting_outside_its_range_is_refused_by_name(field, wrong):
    """The watch acts on its own: a slip here would be made many times in a show."""
    with pytest.raises(ParameterError, match=rf"^{field} must be "):
        Watch(**{field: wrong})


def test_a_watch_survives_a_file_and_the_comments_around_it(tmp_path):
    """A preset of a venue holds both."""
    path = tmp_path / "p.toml"
    path.write_text(
        'title = "Hall"\n\n[watch]  # gentle\nmax_notches = 8  # few\n\n'
        '[[filters]]\nkind = "notch"\nname = "n"\ncentre_hz = 100\ndepth_db = -3\nq = 9\n'
    )
    preset = load_preset(path)
    assert preset.watch == Watch(max_notches=8)
    deeper = Preset(preset.filters, title="Hall", watch=Watch(max_notches=9, deepest_db=-12))
    save_preset(deeper, path)
    assert load_preset(path) == deeper
    assert "# gentle" in path.read_text() and "# few" in path.read_text()
    save_preset(Preset(preset.filters, title="Hall"), path)
    assert load_preset(path).watch is None
    save_preset(deeper, tmp_path / "fresh.toml")
    assert load_preset(tmp_path / "fresh.toml") == deeper


def test_faults_of_a_watch_name_their_line(tmp_path):
    """As every other fault of a file."""
    path = tmp_path / "p.toml"
    path.write_text("[watch]\ndeepest_db = 3\nmax_notch = 4\n")
    with pytest.raises(FileError) as caught:
        load_preset(path)
    assert [fault.line for fault in caught.value.faults] == [2, 3]
    assert "did you mean max_notches?" in str(caught.value)


def test_the_engine_refuses_a_watch_it_cannot_act_on():
    """A user who believes that somebody listens would be worse off than one who knows that nobody does."""
    with pytest.raises(ParameterError, match="watch must be None, since this release cannot listen for howl"):
        Processor(Preset([Notch("n", 100, -3, q=9)], watch=Watch()))
