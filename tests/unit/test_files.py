"""Files are read whole and replaced whole, or not at all."""

import os
import signal
import stat
import subprocess
import sys
import tempfile
import threading
from pathlib import Path

import pytest

from liveres.errors import AudioFileError, FileError, LiveresError
from liveres.files import WriteError, atomic_target, make_folder, number_text, read_text

OLD = b"old and whole\n"
MOST = 100


def run_child(code: str, folder: Path) -> str:
    """What a child process prints; it runs in ``folder`` and has the names these tests use."""
    start = "import os, resource, signal\nfrom liveres.files import *\nfrom liveres.errors import *\n"
    done = subprocess.run([sys.executable, "-c", start + code], cwd=folder, capture_output=True, text=True, timeout=60)
    assert done.returncode in (0, -signal.SIGKILL), done.stderr
    return done.stdout.strip()


@pytest.fixture
def open_folder():
    """A folder that a user without rights can reach, unlike pytest's own."""
    with tempfile.TemporaryDirectory() as name:
        os.chmod(name, 0o755)
        yield Path(name)


DROP_RIGHTS = "if os.getuid() == 0: os.setuid(65534)\n"
# root may write anywhere: the child gives its rights up after its imports


@pytest.fixture
def target(tmp_path):
    """A file that exists already, alone in its folder."""
    path = tmp_path / "kept.toml"
    path.write_bytes(OLD)
    return path


def alone(path: Path) -> bool:
    """True when nothing else, no temporary file above all, lies beside the file."""
    return list(path.parent.iterdir()) == [path]


# --- reading ----------------------------------------------------------------------------------


def test_a_byte_order_mark_is_dropped_and_line_ends_stay(tmp_path):
    """Some editors and spreadsheets write a mark that no parser of ours should meet."""
    path = tmp_path / "a.csv"
    path.write_bytes(b"\xef\xbb\xbfframe\r\n\xc3\xa9")
    assert read_text(path, MOST) == "frame\r\né"


@pytest.mark.parametrize(
    ("content", "message", "line"),
    [
        (b"", "file must not be empty: choose the right file, or write something into it", None),
        (b" \n\t\n", "file must not be empty: choose the right file, or write something into it", None),
        (b"a\nb\n\xff\xfe", "file must be UTF-8 text, got byte 0xff: save it as UTF-8, or choose the right file", 3),
        (b"RIFF\x24\x80", "file must be UTF-8 text, got byte 0x80: save it as UTF-8, or choose the right file", 1),
    ],
)
def test_a_file_that_is_no_text_is_refused_with_its_reason(tmp_path, content, message, line):
    """A sound file given by mistake must be named as such, not end in a trace."""
    path = tmp_path / "a"
    path.write_bytes(content)
    with pytest.raises(FileError) as caught:
        read_text(path, MOST)
    assert [(fault.key, fault.message, fault.line) for fault in caught.value.faults] == [("", message, line)]


def test_a_missing_file_and_a_folder_are_told_apart(tmp_path, target):
    """The remedy differs: look for the name, or name a file in the folder."""
    with pytest.raises(FileError) as caught:
        read_text(tmp_path / "none.toml", MOST)
    assert str(caught.value) == f"{tmp_path}/none.toml: file must exist, got none: check the name and the folder"
    with pytest.raises(FileError) as caught:
        read_text(target / "none.toml", MOST)
    assert str(caught.value) == f"{target}/none.toml: file must exist, got none: check the name and the folder"
    with pytest.raises(FileError) as caught:
        read_text(tmp_path, MOST)
    assert str(caught.value) == f"{tmp_path}: it must be a file, got a folder: name a file inside it"


def test_a_file_is_read_up_to_its_bound_and_a_larger_one_refused(tmp_path):
    """The last byte that is permitted and the first that is not."""
    path = tmp_path / "a"
    path.write_bytes(b"a" * 2**20)
    assert len(read_text(path, 2**20)) == 2**20
    path.write_bytes(b"a" * (2**20 + 1))
    with pytest.raises(FileError) as caught:
        read_text(path, 2**20)
    assert str(caught.value) == f"{path}: file must be at most 1 MB, got a larger one: choose the right file"


def test_a_device_or_pipe_is_refused_unread(tmp_path):
    """/dev/zero never ends, and a pipe without a writer never begins."""
    os.mkfifo(tmp_path / "pipe")
    for path in ("/dev/zero", "/dev/null", tmp_path / "pipe"):
        with pytest.raises(FileError) as caught:
            read_text(path, MOST)
        assert str(caught.value) == f"{path}: it must be an ordinary file, got a device or pipe: save the text in a file first"


def test_an_unreadable_file_is_refused_by_name(open_folder):
    """A preset in another user's folder is a common fault on shared machines."""
    (open_folder / "secret.toml").write_bytes(OLD)
    os.chmod(open_folder / "secret.toml", 0)
    code = DROP_RIGHTS + "try: read_text('secret.toml', 99)\nexcept FileError as error: print(error)"
    told = run_child(code, open_folder)
    assert told == "secret.toml: file must be readable, and permission was refused: change its permissions"


# --- writing ----------------------------------------------------------------------------------


def test_the_new_content_takes_the_old_ones_place(target):
    """The plain use."""
    with atomic_target(target) as temporary:
        temporary.write_bytes(b"new")
        assert target.read_bytes() == OLD
    assert target.read_bytes() == b"new"
    assert alone(target)


def test_the_temporary_file_lies_beside_the_target_with_its_suffix(tmp_path):
    """Renaming is only whole inside one disk, and sound file writers go by the suffix."""
    with atomic_target(tmp_path / "take.wav") as temporary:
        assert temporary.parent == tmp_path
        assert temporary.suffix == ".wav"
        assert temporary.read_bytes() == b""


def test_permissions_are_those_of_the_old_file_or_the_users_usual_ones(tmp_path, target):
    """A saved preset must not become unreadable to the people who share it."""
    os.chmod(target, 0o640)
    with atomic_target(target) as temporary:
        temporary.write_bytes(b"new")
    assert stat.S_IMODE(target.stat().st_mode) == 0o640
    old_mask = os.umask(0o027)
    try:
        with atomic_target(tmp_path / "fresh") as temporary:
            temporary.write_bytes(b"new")
    finally:
        os.umask(old_mask)
    assert stat.S_IMODE((tmp_path / "fresh").stat().st_mode) == 0o640


def test_a_symbolic_link_stays_and_its_file_is_replaced(tmp_path, target):
    """Presets kept under version control are often linked into place."""
    link = tmp_path / "links" / "link.toml"
    link.parent.mkdir()
    link.symlink_to(target)
    with atomic_target(link) as temporary:
        temporary.write_bytes(b"new")
    assert link.is_symlink()
    assert target.read_bytes() == b"new"
    assert list(link.parent.iterdir()) == [link]


@pytest.mark.parametrize("failure", [RuntimeError("x"), KeyboardInterrupt(), AudioFileError("y"), SystemExit(3)])
def test_an_error_or_interrupt_leaves_the_old_file_and_no_other(target, failure):
    """Ctrl-C in the middle of a long render must cost nothing that was there before."""
    with pytest.raises(type(failure)) as caught, atomic_target(target) as temporary:
        temporary.write_bytes(b"half")
        raise failure
    assert caught.value is failure
    assert target.read_bytes() == OLD
    assert alone(target)


def test_a_process_killed_while_writing_leaves_the_old_file(target):
    """A power cut or a kill gives no chance to clean up: the target must be whole all the same."""
    code = "with atomic_target('kept.toml') as t:\n t.write_bytes(b'half')\n os.kill(os.getpid(), signal.SIGKILL)"
    run_child(code, target.parent)
    assert target.read_bytes() == OLD


def test_a_reader_sees_the_old_file_or_the_new_one_and_nothing_between(target):
    """A live host may load a preset while an editor saves it."""
    wholes = {bytes([65 + turn]) * 50_000 for turn in range(20)}
    target.write_bytes(b"A" * 50_000)
    seen, done = set(), threading.Event()

    def read():
        while not done.is_set():
            seen.add(target.read_bytes())

    reader = threading.Thread(target=read)
    reader.start()
    for whole in sorted(wholes):
        with atomic_target(target) as temporary:
            temporary.write_bytes(whole)
    done.set()
    reader.join()
    assert len(seen) > 1
    assert seen <= wholes


def test_a_file_that_grows_past_a_real_limit_is_refused_and_the_old_one_stays(target):
    """The kernel stops the write half-way, as a full disk does."""
    code = (
        "resource.setrlimit(resource.RLIMIT_FSIZE, (10_000, 10_000))\n"
        "try:\n with atomic_target('kept.toml') as t: t.write_bytes(bytes(20_000))\n"
        "except WriteError as error: print(error)"
    )
    told = run_child(code, target.parent)
    assert told == "kept.toml: the file grew larger than this disk or account permits: write less of it, or write it elsewhere"
    assert target.read_bytes() == OLD
    assert alone(target)


def test_a_full_disk_is_refused_and_the_old_file_stays(target):
    """/dev/full answers every write as a full disk does."""
    with pytest.raises(WriteError) as caught, atomic_target(target), open("/dev/full", "wb", buffering=0) as full:
        full.write(b"x")
    assert str(caught.value) == f"{target}: the disk is full: free some space and try again"
    assert isinstance(caught.value, LiveresError) and isinstance(caught.value, OSError)
    assert target.read_bytes() == OLD
    assert alone(target)


def test_an_error_about_another_file_keeps_its_own_name(target, tmp_path):
    """A missing input inside the block must not be reported as a missing output."""
    with pytest.raises(FileNotFoundError) as caught, atomic_target(target):
        (tmp_path / "input.wav").read_bytes()
    assert caught.value.filename == str(tmp_path / "input.wav")
    assert alone(target)


def test_a_folder_that_refuses_is_named_with_its_remedy(open_folder):
    """The old file stays, and the text says which folder to mend."""
    (open_folder / "kept.toml").write_bytes(OLD)
    os.chmod(open_folder, 0o555)
    code = DROP_RIGHTS + "try:\n with atomic_target('new.toml'): pass\nexcept WriteError as error: print(error)"
    told = run_child(code, open_folder)
    os.chmod(open_folder, 0o755)
    remedy = "change its permissions or choose another place"
    assert told == f"new.toml: folder {os.path.realpath(open_folder)} must permit writing, and refused: {remedy}"
    assert alone(open_folder / "kept.toml")


def test_a_write_protected_file_is_not_replaced(open_folder):
    """Renaming would succeed in an open folder; the protection is a wish all the same."""
    (open_folder / "kept.toml").write_bytes(OLD)
    os.chmod(open_folder, 0o777)
    os.chmod(open_folder / "kept.toml", 0o444)
    code = DROP_RIGHTS + "try:\n with atomic_target('kept.toml'): pass\nexcept WriteError as error: print(error)"
    remedy = "change its permissions or choose another name"
    assert run_child(code, open_folder) == f"kept.toml: target must be writable, got a protected one: {remedy}"
    assert (open_folder / "kept.toml").read_bytes() == OLD


def test_a_target_that_cannot_be_a_file_is_refused(tmp_path, target):
    """Replacing a device as root would take it away from the whole machine."""
    folder = os.path.realpath(tmp_path)
    pipe = tmp_path / "elsewhere" / "pipe"
    pipe.parent.mkdir()
    os.mkfifo(pipe)
    for path, message in [
        (tmp_path, "target must be a file, got a folder: name a file inside it"),
        (pipe, "target must be an ordinary file, got a device or pipe: choose another name"),
        (tmp_path / "no" / "a.wav", f"folder {folder}/no must exist, got none: make it or choose another place"),
        (target / "a.wav", f"folder {folder}/kept.toml must exist, got none: make it or choose another place"),
        (tmp_path / ("n" * 300), "the name is too long for this disk: choose a shorter one"),
    ]:
        with pytest.raises(WriteError) as caught, atomic_target(path):
            pytest.fail("the block must not run")
        assert str(caught.value) == f"{path}: {message}"
    assert sorted(tmp_path.iterdir()) == [pipe.parent, target]
    assert alone(pipe)


@pytest.mark.skipif(not os.path.isdir("/proc/self"), reason="needs a folder that only shows what the system knows")
def test_a_folder_that_takes_no_files_is_not_called_missing(tmp_path):
    """The system says "no such file" of a folder that is plainly there."""
    with pytest.raises(WriteError) as caught, atomic_target("/proc/x.wav"):
        pytest.fail("the block must not run")
    assert str(caught.value) == "/proc/x.wav: folder /proc must take new files, and takes none: choose another place"


@pytest.fixture
def read_only_disk(tmp_path):
    """A disk with one file that nobody may write to, where this account may mount one."""
    place = tmp_path / "disk"
    place.mkdir()
    if subprocess.run(["mount", "-t", "tmpfs", "tmpfs", str(place)], capture_output=True).returncode != 0:
        pytest.skip("mounting a disk needs root")
    (place / "old.wav").write_bytes(OLD)
    subprocess.run(["mount", "-o", "remount,ro", str(place)], check=True)
    yield place
    subprocess.run(["umount", str(place)], check=True)


def test_a_read_only_disk_is_named_as_such(read_only_disk):
    """No permission would help there, neither for an old file nor for a new one or a folder."""
    for name in ("old.wav", "new.wav"):
        with pytest.raises(WriteError) as caught, atomic_target(read_only_disk / name):
            pytest.fail("the block must not run")
        assert str(caught.value) == f"{read_only_disk / name}: the disk is read-only: choose another place"
    with pytest.raises(WriteError) as caught:
        make_folder(read_only_disk / "a" / "b")
    assert str(caught.value) == f"{read_only_disk}/a/b: the disk is read-only: choose another place"
    assert (read_only_disk / "old.wav").read_bytes() == OLD


def test_a_folder_is_made_with_those_above_it_and_one_that_is_there_is_left(tmp_path):
    """The plain use."""
    make_folder(tmp_path / "a" / "b")
    (tmp_path / "a" / "b" / "kept").write_bytes(OLD)
    make_folder(tmp_path / "a" / "b")
    assert (tmp_path / "a" / "b" / "kept").read_bytes() == OLD


def test_a_folder_is_not_made_where_a_file_stands(target):
    """In its place or above it."""
    for path in (target, target / "takes"):
        with pytest.raises(WriteError) as caught:
            make_folder(path)
        assert str(caught.value) == f"{path}: it must be a folder, and a file is in its way: choose another name"
    assert alone(target) and target.read_bytes() == OLD


def test_a_folder_is_refused_in_the_name_of_the_one_above(open_folder):
    """That is the one whose permissions are to be changed."""
    os.chmod(open_folder, 0o555)
    told = run_child(DROP_RIGHTS + "try: make_folder('a/b')\nexcept WriteError as error: print(error)", open_folder)
    os.chmod(open_folder, 0o755)
    remedy = "change its permissions or choose another place"
    assert told == f"a/b: folder {os.path.realpath(open_folder)} must permit writing, and refused: {remedy}"


@pytest.mark.parametrize("number", [0.0, -0.0, 48000.0, 0.1, 1e-320, 1e15, 1e22, 1.7e308, 2**53 - 1.0, float("-inf"), 1 / 3])
def test_a_written_number_reads_back_equal(number):
    """Saving twice must not wander."""
    assert float(number_text(number)) == number
