import json
import os
import signal
import subprocess
import sys
import time

import pytest

from trackfit.faults import ResultsError
from trackfit.results import folder as folder_module
from trackfit.results import read_results, recover, swap_in, write_record
from trackfit.results.manifest import RECORD, foreign_entries, list_files, read_record
from trackfit.results.record import FORMAT_VERSION

FILES = 6


def fill(folder, word):
    """Write a small set of files that all hold the same word, and the record last."""
    (folder / "figures").mkdir()
    for number in range(FILES):
        (folder / "figures" / f"{number}.txt").write_text(word * 200)
    write_record(folder, {"written_by": "trackfit", "format_version": FORMAT_VERSION, "word": word})


def write(folder, word, overwrite=True):
    with swap_in(folder, overwrite=overwrite) as fresh:
        fill(fresh, word)


def word_of(folder):
    """Return the one word all files hold; fail if the folder is not whole."""
    record = read_record(folder)
    assert record is not None
    assert foreign_entries(folder) == []
    assert len(record["files"]) == FILES == len(list_files(folder))
    texts = {p.read_text() for p in (folder / "figures").iterdir()}
    assert texts == {record["word"] * 200}
    return record["word"]


def beside(folder):
    return sorted(p.name for p in folder.parent.iterdir() if p != folder)


@pytest.fixture(params=["exchange", "two renames"])
def system(request, monkeypatch):
    if request.param == "two renames":
        monkeypatch.setattr(folder_module, "exchange", lambda one, other: False)
    return request.param


@pytest.mark.usefixtures("system")
def test_new_results_replace_old_ones_and_leave_nothing_beside(tmp_path):
    target = tmp_path / "deep" / "results"
    write(target, "old", overwrite=False)
    assert word_of(target) == "old"
    write(target, "new")
    assert word_of(target) == "new"
    assert beside(target) == []


def test_exchange_is_done_in_one_step_here(tmp_path):
    for name in "ab":
        (tmp_path / name).mkdir()
        (tmp_path / name / "x").write_text(name)
    assert folder_module.exchange(tmp_path / "a", tmp_path / "b")
    assert (tmp_path / "a" / "x").read_text() == "b"
    with pytest.raises(FileNotFoundError, match="No such file"):
        folder_module.exchange(tmp_path / "a", tmp_path / "missing")


@pytest.mark.usefixtures("system")
@pytest.mark.parametrize("fault", [RuntimeError("stop"), KeyboardInterrupt("stop")])
def test_failure_leaves_the_old_results(tmp_path, fault):
    target = tmp_path / "results"
    write(target, "old")
    with pytest.raises(type(fault), match="stop"), swap_in(target, overwrite=True) as fresh:  # noqa: PT012
        fill(fresh, "new")
        raise fault
    assert word_of(target) == "old"
    assert beside(target) == []


def test_full_disk_is_told_in_words(tmp_path):
    target = tmp_path / "results"
    told = pytest.raises(ResultsError, match=r"results: results cannot be written \(No space left")
    with told, swap_in(target):
        raise OSError(28, "No space left on device")
    assert list(tmp_path.iterdir()) == []


def test_existing_folder_needs_overwriting(tmp_path):
    write(tmp_path / "results", "old")
    with pytest.raises(ResultsError, match="exists already; ask for overwriting"):
        write(tmp_path / "results", "new", overwrite=False)
    assert word_of(tmp_path / "results") == "old"


def add_file(target):
    (target / "figures" / "notes.txt").write_text("mine")
    return "figures/notes.txt"


def add_hidden(target):
    (target / ".keep").write_text("")
    return ".keep"


def add_folder(target):
    (target / "mine").mkdir()
    return "mine"


def add_link(target):
    (target / "link").symlink_to(target / "figures" / "0.txt")
    return "link"


def change_file(target):
    (target / "figures" / "0.txt").write_text("changed by hand")
    return "figures/0.txt"


def change_file_keeping_its_size(target):
    (target / "figures" / "0.txt").write_text("xyz" * 200)
    return "figures/0.txt"


def change_record(target):
    record = json.loads((target / RECORD).read_text())
    (target / RECORD).write_text(json.dumps({**record, "my_note": "keep"}))
    return RECORD


def lose_record(target):
    (target / RECORD).unlink()
    return "figures, figures/0.txt"


CHANGES = [
    add_file,
    add_hidden,
    add_folder,
    add_link,
    change_file,
    change_file_keeping_its_size,
    change_record,
    lose_record,
]


@pytest.mark.parametrize("change", CHANGES)
def test_a_users_files_are_never_replaced(tmp_path, change):
    target = tmp_path / "results"
    write(target, "old")
    named = change(target)
    before = {p: p.lstat().st_size for p in target.rglob("*")}
    with pytest.raises(
        ResultsError, match=f"holds .*{named}.*, not written by trackfit or changed"
    ):
        write(target, "new")
    assert {p: p.lstat().st_size for p in target.rglob("*")} == before
    assert beside(target) == []


@pytest.mark.usefixtures("system")
def test_a_file_added_during_the_run_is_not_lost(tmp_path):
    target = tmp_path / "results"
    write(target, "old")
    told = pytest.raises(ResultsError, match=r"holds late\.txt")
    with told, swap_in(target, overwrite=True) as fresh:
        fill(fresh, "new")
        (target / "late.txt").write_text("mine")
    assert (target / "late.txt").read_text() == "mine"


def test_a_file_is_no_folder(tmp_path):
    (tmp_path / "results").write_text("x")
    with pytest.raises(ResultsError, match="is a file; results need a folder"):
        write(tmp_path / "results", "new")


def test_a_link_to_a_folder_stays_a_link(tmp_path):
    write(tmp_path / "disk", "old")
    (tmp_path / "results").symlink_to(tmp_path / "disk")
    write(tmp_path / "results", "new")
    assert (tmp_path / "results").is_symlink()
    assert word_of(tmp_path / "disk") == "new"


def test_an_empty_folder_may_be_overwritten(tmp_path):
    (tmp_path / "results").mkdir()
    write(tmp_path / "results", "new")
    assert word_of(tmp_path / "results") == "new"


def test_stale_siblings_go_and_others_stay(tmp_path):
    target = tmp_path / "results"
    half = tmp_path / ".results.new-4000000"
    half.mkdir()
    (half / "positions.csv").write_text("half")
    other = tmp_path / ".results.new-mine"
    other.mkdir()
    write(target, "new")
    assert beside(target) == [".results.new-mine"]


def test_a_whole_stale_sibling_is_removed_only_as_listed(tmp_path):
    stale = tmp_path / ".results.new-4000000"
    stale.mkdir()
    fill(stale, "old")
    (stale / "mine.txt").write_text("mine")
    write(tmp_path / "results", "new")
    assert [p.name for p in stale.rglob("*")] == ["mine.txt"]


def test_death_between_two_renames_is_set_right(tmp_path):
    target = tmp_path / "results"
    write(target, "old")
    target.rename(tmp_path / ".results.old-4000000")
    fresh = tmp_path / ".results.new-4000000"
    fresh.mkdir()
    fill(fresh, "new")
    recover(target)
    assert word_of(target) == "old"
    assert beside(target) == []


def test_reading_sets_a_half_done_swap_right_first(tmp_path):
    target = tmp_path / "results"
    write(target, "old")
    target.rename(tmp_path / ".results.old-4000000")
    with pytest.raises(ResultsError, match=r"holds none of positions\.csv"):
        read_results(target)
    assert word_of(target) == "old"


def test_two_runs_at_once_do_not_meet(tmp_path):
    target = tmp_path / "results"
    with swap_in(target) as fresh:
        with pytest.raises(ResultsError, match="another run is writing it now"):
            write(target, "second")
        fill(fresh, "first")
    assert word_of(target) == "first"


KILLS = 24


def write_for_ever(target, done):
    """Replace the results again and again, and say so after each time."""
    number = 0
    while True:
        number += 1
        write(target, f"w{number:06d}")
        os.write(done, b".")


def kill_one(target, phase):
    """Kill a writer at a phase of its third swap: two are finished then."""
    read_end, write_end = os.pipe()
    child = os.fork()
    if child == 0:
        write_for_ever(target, write_end)
    os.close(write_end)
    os.read(read_end, 1)
    start = time.perf_counter()
    os.read(read_end, 1)
    time.sleep((time.perf_counter() - start) * phase)
    os.kill(child, signal.SIGKILL)
    assert os.waitpid(child, 0)[1] == signal.SIGKILL
    os.close(read_end)


def kill_many(target, way):
    """Kill writers at many moments; after each, the results must be one whole set of files."""
    if way == "two renames":
        folder_module.exchange = lambda one, other: False
    for kill in range(KILLS):
        kill_one(target, 1.5 * kill / KILLS)
        if way == "exchange":
            assert target.is_dir()
        else:
            recover(target)
        assert int(word_of(target)[1:]) >= 2
        print("whole", flush=True)


@pytest.mark.parametrize("way", ["exchange", "two renames"])
def test_a_run_killed_at_any_moment_leaves_whole_results(tmp_path, way):
    """SIGKILL at moments spread over a swap, in a process of its own because it forks."""
    target = tmp_path / "results"
    write(target, "w000000")
    code = (
        "import sys, pathlib, test_results_folder as here; "
        "here.kill_many(pathlib.Path(sys.argv[1]), sys.argv[2])"
    )
    done = subprocess.run(
        [sys.executable, "-c", code, str(target), way],
        cwd=os.path.dirname(__file__),
        env={**os.environ, "PYTHONPATH": os.pathsep.join(sys.path)},
        capture_output=True,
        text=True,
        check=False,
    )
    assert done.returncode == 0, done.stderr
    assert done.stdout.split() == ["whole"] * KILLS
    write(target, "last")
    assert word_of(target) == "last"
    assert beside(target) == []
