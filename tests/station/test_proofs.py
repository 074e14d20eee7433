"""The file of proofs: what voids one, and that nothing recorded in it goes away."""

from __future__ import annotations

import json
from pathlib import Path

from daq.station.locks import Locks
from daq.station.proofs import POLARITY, Void, read_proofs, void_polarity, void_proof, write_proof
from tests.watch.frames import frame

REAL = frame(simulated=False)
LOCK = Void("the force had the wrong sign", "2026-01-02T03:04:05.678+00:00", 7, 12.5)


def proven(path: Path) -> bool:
    return read_proofs(path, REAL)["polarity"]


def test_a_lock_voids_the_standing_proof_and_keeps_it_with_reason_and_time(tmp_path: Path) -> None:
    path = tmp_path / "proofs.json"
    write_proof(path, REAL, POLARITY, {"pushed_n": 8.0})
    write_proof(path, REAL, "stop_drill", {"after_s": 0.2})
    assert read_proofs(path, REAL) == {"polarity": True, "stop_drill": True, "cell": True}
    void_proof(path, POLARITY, LOCK)
    assert read_proofs(path, REAL) == {"polarity": False, "stop_drill": True, "cell": True}
    stored = json.loads(path.read_text("utf-8"))
    (earlier,) = stored["earlier"]
    assert earlier["pushed_n"] == 8.0
    assert earlier["void"] == {"reason": LOCK.reason, "utc": LOCK.utc, "stream": 7, "locked_s": 12.5}


def test_the_same_lock_heard_again_leaves_a_newer_proof_alone_and_another_does_not(tmp_path: Path) -> None:
    path = tmp_path / "proofs.json"
    void_proof(path, POLARITY, LOCK)
    write_proof(path, REAL, POLARITY, {})
    void_proof(path, POLARITY, LOCK)
    assert proven(path)
    void_polarity(path, 7, 99.0)
    assert not proven(path)
    assert [void["locked_s"] for void in json.loads(path.read_text("utf-8"))["voids"]] == [12.5, 99.0]


def test_the_last_word_of_a_locked_bench_adds_nothing_where_no_proof_stands(tmp_path: Path) -> None:
    path = tmp_path / "proofs.json"
    void_polarity(path, 7, None)
    assert not path.exists()
    write_proof(path, REAL, POLARITY, {})
    void_polarity(path, 7, None)
    assert not proven(path)


def test_a_file_that_cannot_be_read_is_kept_beside(tmp_path: Path) -> None:
    path = tmp_path / "proofs.json"
    path.write_text('{"polarity": ', encoding="utf-8")
    assert not proven(path)
    write_proof(path, REAL, POLARITY, {})
    assert proven(path)
    assert path.with_suffix(".damaged").read_text("utf-8") == '{"polarity": '


def test_an_overload_locks_until_the_check_and_a_snapshot_of_before_locks_nothing(tmp_path: Path) -> None:
    path = tmp_path / "proofs.json"
    locks = Locks(path, REAL, 7, print)
    locks.notice({"event": "cell_locked", "time_s": 3.0})
    locks.beat({"cell_locked_s": 3.0, "polarity_locked_s": None})
    assert not locks.proofs()["cell"] and not read_proofs(path, REAL)["cell"]
    again = Locks(path, REAL, 8, print)  # the next daemon: its bench starts locked, at no time of its own
    again.beat({"cell_locked_s": 0.0, "polarity_locked_s": None})
    again.notice({"event": "cell_checked", "who": "A. Person", "weight_n": 200.0, "found_n": 200.1})
    again.beat({"cell_locked_s": 0.0, "polarity_locked_s": None})
    assert again.proofs()["cell"]
    (lock,) = json.loads(path.read_text("utf-8"))["cell_locks"]
    assert lock["stream"] == 7 and lock["checked"]["found_n"] == 200.1
    locks.beat({"cell_locked_s": 3.0, "polarity_locked_s": None})
    assert read_proofs(path, REAL)["cell"]


def test_a_changed_card_is_a_cell_that_was_seen_to_anew(tmp_path: Path) -> None:
    path = tmp_path / "proofs.json"
    Locks(path, REAL, 7, print).notice({"event": "cell_locked", "time_s": 3.0})
    assert read_proofs(path, frame(simulated=False, cell__zero_balance_n=0.4))["cell"]


def test_a_lock_that_cannot_be_written_counts_and_is_told_once(tmp_path: Path) -> None:
    path = tmp_path / "there" / "proofs.json"
    (tmp_path / "there").write_text("a file where a folder should be", encoding="utf-8")
    said: list[str] = []
    locks = Locks(path, REAL, 7, said.append)
    for _ in range(3):
        locks.beat({"cell_locked_s": None, "polarity_locked_s": 3.0})
    assert not locks.proofs()["polarity"] and len(said) == 1
    (tmp_path / "there").unlink()
    write_proof(path, REAL, POLARITY, {})
    locks.beat({"cell_locked_s": None, "polarity_locked_s": 3.0})
    assert not read_proofs(path, REAL)["polarity"] and len(said) == 1
