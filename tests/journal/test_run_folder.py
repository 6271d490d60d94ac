"""OUT.run: ours alone, held by one process, told from what others put there, and gone when the result is in place."""

from __future__ import annotations

import fcntl
import json
import os
import socket
import stat
import subprocess
import sys
import time
from pathlib import Path
from typing import Any

import pytest
from journal_samples import KRYLOV, OPTIONS, Cut, Kept, begin, bits, cut_at, cut_in, left_in, slow_decay

import bigsvd
from bigsvd.errors import DamagedJournalError, OtherRunError, ResultError, ResultExistsError
from bigsvd.factors import OutputLock, Place
from bigsvd.journal import discard_finished, journal_bytes, read_standing

BASE: dict[str, Any] = OPTIONS | KRYLOV
pytestmark = pytest.mark.usefixtures("short_waves")


@pytest.fixture
def out(tmp_path: Path) -> Path:
    return tmp_path / "out.zarr"


@pytest.fixture
def run(tmp_path: Path) -> Path:
    return tmp_path / "out.zarr.run"


def decompose(out: Path, **options: Any) -> Any:
    return bigsvd.decompose(Kept(slow_decay()), out, **(BASE | options))


def refused(out: Path, error: type[ResultError] = ResultError, **options: Any) -> str:
    """Words of the refusal, which changes nothing."""
    before = {path: path.lstat().st_mtime_ns for path in sorted(out.parent.rglob("*")) if path.suffix != ".lock"}
    with pytest.raises(error) as caught:
        decompose(out, **options)
    after = {path: path.lstat().st_mtime_ns for path in sorted(out.parent.rglob("*")) if path.suffix != ".lock"}
    assert set(after) == set(before)
    assert caught.value.remedy
    return str(caught.value)


# ------------------------------------------------------------------------------------------------------ what it is
def test_the_folder_is_private_and_gone_when_the_result_is_there(out: Path, run: Path) -> None:
    seen: list[int] = []
    decompose(out, progress=lambda event: seen.append(stat.S_IMODE(run.stat().st_mode)) if run.exists() else None)
    assert set(seen) == {0o700}
    assert left_in(out.parent) == ["out.zarr"]


def test_a_cut_run_leaves_its_folder_and_nothing_else(out: Path, run: Path) -> None:
    begin(Kept(slow_decay()), out, cut_at(2, 0.5), **BASE)
    assert left_in(out.parent) == ["out.zarr.run"]
    names = {path.name.split("-")[0] for path in run.iterdir()}
    assert {"identity.json", "pilot", "sums", "scratch"} <= names
    assert not [name for name in names if name.endswith(".new")]


def test_a_run_cut_before_anything_was_kept_leaves_nothing(out: Path) -> None:
    begin(Kept(slow_decay()), out, cut_in("pilot"), **BASE)
    assert left_in(out.parent) == []


def test_what_cannot_be_gone_on_with_leaves_nothing(out: Path) -> None:
    matrix = slow_decay().copy()
    matrix[1500, 3] = float("nan")
    with pytest.raises(bigsvd.errors.NonFiniteError):
        bigsvd.decompose(Kept(matrix), out, **BASE)
    assert left_in(out.parent) == []


def test_the_journal_takes_no_more_than_was_foreseen(out: Path, run: Path) -> None:
    most = 0

    def look(event: object) -> None:
        nonlocal most
        if run.exists():
            sizes = []
            for path in run.iterdir():
                # Records come and go meanwhile.
                try:
                    sizes.append(path.stat().st_size if path.is_file() else 0)
                except FileNotFoundError:
                    continue
            most = max(most, sum(sizes))

    for options in ({}, {"route": "gram"}, {"route": "tsqr"}, {"axis": "columns", "scale": "unit", "panel_lines": 5}):
        most = 0
        asked = BASE | options | {"max_sweeps": 2}
        decompose(out, **(asked | {"overwrite": True, "progress": look}))
        plan = bigsvd.forecast(
            Kept(slow_decay()), **{name: value for name, value in asked.items() if name != "save_every"}
        ).plan
        assert journal_bytes(plan) / 8 < most <= journal_bytes(plan), options


def test_a_folder_taken_apart_under_the_run_does_not_hide_what_ended_it(out: Path, run: Path) -> None:
    class Broken(Exception):
        pass

    def take_apart(event: Any) -> None:
        if event.sweep == 2 and event.bytes_done:
            (run / "identity.json").unlink(missing_ok=True)
            raise Broken

    with pytest.raises(Broken):
        decompose(out, progress=take_apart)
    assert "kept: nothing" in out.with_name("out.zarr.log").read_text()


# ------------------------------------------------------------------------------------------------- what is in the way
@pytest.mark.parametrize("kind", ["link", "file", "strangers"])
def test_what_is_no_folder_of_a_run_is_refused_and_kept(kind: str, out: Path, run: Path) -> None:
    if kind == "link":
        (out.parent / "target").mkdir()
        run.symlink_to(out.parent / "target")
    elif kind == "file":
        run.write_text("years of work")
    else:
        run.mkdir()
        (run / "thesis").write_text("years of work")
    said = {"link": "it is a link to", "file": "it is a file", "strangers": "identity.json is missing"}
    for options in ({}, {"start_over": True}):
        text = refused(out, **options)
        assert f"{run} is in the way" in text
        assert said[kind] in text


def test_a_folder_of_another_user_is_refused(cut: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    out = cut.with_name("out.zarr")
    user = os.geteuid()
    monkeypatch.setattr(os, "geteuid", lambda: user + 1)
    assert f"it belongs to user {user}, this process runs as user {user + 1}" in refused(out)


def test_a_scratch_folder_that_is_a_link_is_refused(cut: Path) -> None:
    out, run = cut.with_name("out.zarr"), cut
    (run / "scratch").rename(out.parent / "target")
    (run / "scratch").symlink_to(out.parent / "target")
    assert "scratch is in the way, where intermediate products go" in refused(out)


@pytest.mark.parametrize("left", [[], ["identity.json.new"]])
def test_a_process_that_died_while_it_made_the_folder_is_no_hindrance(left: list[str], out: Path, run: Path) -> None:
    run.mkdir(mode=0o700)
    for name in left:
        (run / name).write_text('{"form')
    decompose(out)
    assert left_in(out.parent) == ["out.zarr"]


def test_a_run_that_kept_nothing_is_no_hindrance_whatever_it_was(out: Path, run: Path) -> None:
    run.mkdir(mode=0o700)
    (run / "identity.json").write_text("tide")
    decompose(out)
    assert left_in(out.parent) == ["out.zarr"]


@pytest.mark.parametrize("content", ["", "tide", "[]", '{"format": 1}', '{"format": 9, "identity": {}, "scratch": ""}'])
def test_an_identity_that_cannot_be_read_is_refused_until_start_over(content: str, cut: Path) -> None:
    out, run = cut.with_name("out.zarr"), cut
    (run / "identity.json").write_text(content)
    assert "does not say which run it is of" in refused(out, DamagedJournalError)
    with pytest.raises(DamagedJournalError):
        read_standing(run)
    assert decompose(out, start_over=True).attributes["resumed"] == 0


@pytest.mark.parametrize("identity", ["{}", '{"input": 3, "options": [1], "plan": null}'])
def test_an_identity_of_another_shape_is_another_run(identity: str, cut: Path) -> None:
    out, run = cut.with_name("out.zarr"), cut
    record = json.loads((run / "identity.json").read_text())
    (run / "identity.json").write_text(json.dumps(record | {"identity": json.loads(identity)}))
    assert "option --rank: not given when the run began, 6 now" in refused(out, OtherRunError)
    assert read_standing(run).kept_bytes == 0


# --------------------------------------------------------------------------------------------------------- one process
HOLD = """
import sys, time
from pathlib import Path
from bigsvd.factors import OutputLock, Place
place = Place.at(Path(sys.argv[1]))
OutputLock(place.lock, place.out).acquire()
print("held", flush=True)
time.sleep(60)
"""


def test_a_second_run_is_refused_and_told_who_is_at_it(cut: Path) -> None:
    out, run = cut.with_name("out.zarr"), cut
    holder = subprocess.Popen([sys.executable, "-c", HOLD, str(out)], stdout=subprocess.PIPE, text=True)
    try:
        assert holder.stdout is not None
        assert holder.stdout.readline() == "held\n"
        for options in ({}, {"start_over": True}, {"overwrite": True}):
            text = refused(out, **options)
            assert f"another run is writing {out}" in text
            assert f"process {holder.pid} on {socket.gethostname()}, since " in text
            assert str(out.with_name("out.zarr.lock")) in text
        assert read_standing(run).running
    finally:
        holder.kill()
        holder.communicate()
    # The system let go of the lock when the process died; its file is no hindrance.
    assert out.with_name("out.zarr.lock").exists()
    assert not read_standing(run).running
    assert decompose(out).attributes["resumed"] == 1
    assert left_in(out.parent) == ["aside", "out.zarr", "whole.zarr"]


def test_the_lock_is_held_all_the_while(out: Path) -> None:
    place, held = Place.at(out), []

    def look(event: object) -> None:
        if place.run.exists():
            handle = os.open(place.lock, os.O_RDWR)
            try:
                fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
                held.append(False)
            except BlockingIOError:
                held.append(True)
            finally:
                os.close(handle)

    decompose(out, progress=look)
    assert held
    assert all(held)


def test_two_results_of_one_name_do_not_share_a_scratch_folder(tmp_path: Path) -> None:
    """Both runs would write their products into the same files, unnoticed."""
    fast = tmp_path / "fast"
    places = [tmp_path / name / "out.zarr" for name in ("one", "two")]
    for place in (fast, *(place.parent for place in places)):
        place.mkdir()
    inside: list[str] = []

    def other(event: Any) -> None:
        if event.sweep == 2 and not inside:
            inside.append("began")
            decompose(places[1], scratch=fast, seed=5)

    decompose(places[0], scratch=fast, progress=other)
    assert inside
    decompose(tmp_path / "plain.zarr")
    assert bits(places[0]) == bits(tmp_path / "plain.zarr")
    assert list(fast.iterdir()) == []


# ------------------------------------------------------------------------------------------------ a result beside it
def test_an_earlier_result_stays_until_the_new_one_is_there(out: Path, run: Path) -> None:
    decompose(out, rank=3)
    before = bits(out)
    with pytest.raises(Cut):
        decompose(out, overwrite=True, progress=cut_at(2, 0.5))
    assert bits(out) == before
    assert "--overwrite" in refused(out, ResultExistsError)
    gone_on = decompose(out, overwrite=True)
    assert gone_on.attributes["resumed"] == 1
    assert gone_on.rank == 6
    assert left_in(out.parent) == ["out.zarr"]


def test_a_folder_left_by_a_process_that_died_after_the_last_step_is_removed(out: Path, run: Path) -> None:
    begin(Kept(slow_decay()), out, cut_at(2, 0.5), **BASE)
    kept = out.parent / "kept"
    run.rename(kept)
    decompose(out)
    kept.rename(run)
    discard_finished(out)
    assert left_in(out.parent) == ["out.zarr"]


@pytest.mark.parametrize("clock", ["as it was", "set back", "set ahead"])
def test_a_folder_begun_beside_the_result_is_a_run_that_goes_on(clock: str, out: Path, run: Path) -> None:
    decompose(out, rank=3)
    with pytest.raises(Cut):
        decompose(out, overwrite=True, progress=cut_at(2, 0.5))
    if clock != "as it was":
        moment = time.time() + (-1e6 if clock == "set back" else 1e6)
        for path in run.rglob("*"):
            os.utime(path, (moment, moment))
    discard_finished(out)
    assert run.is_dir()
    lock = OutputLock(Place.at(out).lock, out)
    lock.acquire()
    discard_finished(out)
    lock.release()
    assert read_standing(run).sweep == 2
