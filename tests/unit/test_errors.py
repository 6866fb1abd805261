"""The error tree, the wording of faults in files, and the remedy for a name nobody knows."""

import datetime

import pytest

from liveres.errors import AudioFileError, DeviceError, Fault, FileError, LiveresError, ParameterError, nearest, told

# --- tree -------------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "kind, also",
    [(ParameterError, ValueError), (FileError, ValueError), (AudioFileError, OSError), (DeviceError, OSError)],
)
def test_every_error_is_ours_and_one_python_knows(kind, also):
    """A caller may catch everything of ours at once, or go by the kind Python has for it."""
    assert issubclass(kind, LiveresError)
    assert issubclass(kind, also)


@pytest.mark.parametrize("kind", [ParameterError, AudioFileError, DeviceError])
def test_an_error_reads_as_the_message_it_was_given(kind):
    """Nothing is put before or after: the message is shown to people as it is."""
    assert str(kind("x must be 1, got 2: use 1")) == "x must be 1, got 2: use 1"


def test_the_kinds_do_not_catch_one_another():
    """A broken device must not pass for a wrong value."""
    kinds = [ParameterError, FileError, AudioFileError, DeviceError]
    assert not any(issubclass(one, other) for one in kinds for other in kinds if one is not other)


# --- faults in files --------------------------------------------------------------------------


@pytest.mark.parametrize(
    "fault, text",
    [
        (Fault("filters[2].q", "q must be a number", 12), "p.toml:12: filters[2].q: q must be a number"),
        (Fault("filters[2].q", "q must be a number"), "p.toml: filters[2].q: q must be a number"),
        (Fault("", "no such file", 3), "p.toml:3: no such file"),
        (Fault("", "no such file"), "p.toml: no such file"),
    ],
)
def test_a_fault_names_the_parts_of_its_place_that_are_known(fault, text):
    """path:line: key: message is what editors jump to."""
    assert fault.text("p.toml") == text


def test_a_file_error_lists_every_fault_in_file_order():
    """All faults at once: nobody should have to mend a file one run at a time."""
    late, early, whole = Fault("b", "second", 9), Fault("a", "first", 2), Fault("", "nowhere in particular")
    error = FileError("p.toml", [late, early, whole])
    assert error.faults == (whole, early, late)
    assert error.path == "p.toml"
    assert str(error) == "p.toml: nowhere in particular\np.toml:2: a: first\np.toml:9: b: second"


def test_faults_of_one_line_keep_the_order_they_were_found_in():
    """Several faults on a line are told from left to right."""
    faults = [Fault(key, "wrong", 4) for key in "zay"]
    assert FileError("p.toml", iter(faults)).faults == tuple(faults)


def test_a_file_error_takes_a_path_object(tmp_path):
    """Commands hand over what they opened."""
    error = FileError(tmp_path / "p.toml", [Fault("", "wrong")])
    assert error.path == str(tmp_path / "p.toml")
    assert str(error) == f"{tmp_path / 'p.toml'}: wrong"


# --- names ------------------------------------------------------------------------------------

KNOWN = ["centre_hz", "depth_db", "q"]


@pytest.mark.parametrize(
    "word, known, remedy",
    [
        ("center_hz", KNOWN, "did you mean centre_hz?"),
        ("depth", KNOWN, "did you mean depth_db?"),
        ("centre_hz", KNOWN, "did you mean centre_hz?"),
        ("width", KNOWN, "use one of centre_hz, depth_db, q"),
        ("", KNOWN, "use one of centre_hz, depth_db, q"),
        ("q", [], "none is known here"),
        ("hum", iter(["hun", "ham"]), "did you mean hun?"),
    ],
)
def test_an_unknown_name_is_met_with_the_nearest_or_with_all_there_are(word, known, remedy):
    """A typing slip is the usual fault; a wild guess needs the whole list."""
    assert nearest(word, known) == remedy


# --- values -----------------------------------------------------------------------------------


@pytest.mark.parametrize(
    "value, text",
    [
        (True, "true"),
        (False, "false"),
        ({"q": 3}, "a table"),
        ({}, "a table"),
        ([{"q": 3}], "a list of tables"),
        ([1, 2], "[1, 2]"),
        (datetime.date(2024, 1, 1), "2024-01-01"),
        (datetime.time(12, 30), "12:30:00"),
        ("5", "'5'"),
        (None, "None"),
        (1.5, "1.5"),
        ("x" * 58, f"'{'x' * 58}'"),
        ("x" * 59, f"'{'x' * 56}..."),
    ],
)
def test_a_value_is_told_as_a_file_would_have_it(value, text):
    """Who wrote true or [filters] has not written True or {...}; and a message is a line, not a page."""
    assert told(value) == text
