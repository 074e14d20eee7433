"""No altered record passes, whatever was altered and however well it was covered up; the first damage is named."""

from __future__ import annotations

import json
import shutil
import subprocess
import sys
from collections.abc import Callable
from dataclasses import replace
from pathlib import Path
from typing import Any

import h5py
import numpy as np
import pytest

from daq.errors import RecordDamaged
from daq.record.digest import OWN_DIGEST, BlockDigest, describe_object, seal_digest, slabs_of, walk
from daq.record.front import FRONT_BYTES, front_block
from daq.record.publish import sha256_of
from daq.record.read import check_bytes, read_meta, read_run
from daq.record.recover import recover
from daq.record.texts import fixed_text, plain_text
from daq.record.verify import check_contents, verify
from daq.stream.entry import Entry, Kind, pack, unpack_all
from tests.record.synthetic_run import SyntheticBench, demo_entries, demo_reduce

Make = Callable[[Path, list[Entry]], Path]


def sealed_run(make_journal: Make, folder: Path, entries: list[Entry]) -> Path:
    (path,) = recover(make_journal(folder / "j", entries), folder / "out", reduce=demo_reduce)
    return path


def altered(record: Path, folder: Path, alter: Callable[[Any], None], *, cover: bool) -> Path:
    """A copy with something altered; cover: its seal and its front made to fit, as a forger would."""
    path = folder / "altered.h5"
    shutil.copyfile(record, path)
    with h5py.File(path, "r+") as file:
        alter(file)
        if cover:
            _reseal(file)
    body = sha256_of(path, skip_bytes=FRONT_BYTES)
    with open(path, "r+b") as raw:
        raw.write(front_block(body, path.stat().st_size - FRONT_BYTES))
    return path


def _reseal(file: Any) -> None:
    listed = {}
    for path, item in walk(file):
        listed[path] = describe_object(item)
        if isinstance(item, h5py.Dataset):
            digest = BlockDigest()
            for _, data in slabs_of(item):
                digest.feed(data)
            listed[path].update(digest.finish())
    seal, text = file["seal"], json.dumps(listed)
    del seal["list"]
    seal.create_dataset("list", data=fixed_text(text))
    words = {name: plain_text(value) for name, value in seal.attrs.items() if name != OWN_DIGEST}
    seal.attrs[OWN_DIGEST] = fixed_text(seal_digest(words, text))


def restream(change: Callable[[list[Entry]], list[Entry]]) -> Callable[[Any], None]:
    """Replace /stream by the changed entries, with attributes that fit."""

    def alter(file: Any) -> None:
        old = file["stream"]
        entries = change(list(unpack_all(old[:].tobytes())))
        data = np.frombuffer(b"".join(map(pack, entries)), dtype="u1")
        attrs = dict(old.attrs)
        del file["stream"]
        new = file.create_dataset("stream", data=data, chunks=(4096,))
        for key, value in attrs.items():
            new.attrs[key] = value
        new.attrs["entries"] = np.uint64(len(entries))
        new.attrs["last_sequence"] = np.uint64(entries[-1].sequence)

    return alter


def test_an_untouched_record_passes_every_look(record: Path) -> None:
    report = check_contents(record)
    assert report.ok and report.accounted
    assert (report.entries, report.rows, report.events, report.gaps) == (470, 600, 6, 2)


def test_every_single_byte_change_is_found_without_opening_hdf5(record: Path, tmp_path: Path) -> None:
    whole = record.read_bytes()
    rng = np.random.default_rng(20310506)
    places = [*range(0, FRONT_BYTES, 2), *rng.integers(FRONT_BYTES, len(whole), 300).tolist()]
    mutant = tmp_path / "mutant.h5"
    for place in places:
        changed = whole[place] ^ int(rng.integers(1, 256))
        mutant.write_bytes(whole[:place] + bytes([changed]) + whole[place + 1 :])
        with pytest.raises(RecordDamaged):
            check_bytes(mutant)


CHILD = """
import signal, sys
from pathlib import Path
import h5py
from daq.record.verify import check_contents
def content(path):
    found = {}
    def look(name, item):
        found[name] = sorted((key, item.attrs[key].tobytes()) for key in item.attrs)
        if isinstance(item, h5py.Dataset):
            found[name] += [(str(item.dtype), item.shape, item[()].tobytes())]
    with h5py.File(path, "r") as file:
        look("/", file["/"])
        file.visititems(look)
    return found
original, folder, first = content(sys.argv[1]), Path(sys.argv[2]), int(sys.argv[3])
for path in sorted(folder.glob("*.h5"))[first:]:
    signal.alarm(3)
    report = check_contents(path)
    if report.ok and content(path) != original:
        word = "MISSED"
    else:
        word = "same" if report.ok else "flagged"
    print(path.stem, word, flush=True)
"""


@pytest.mark.slow
@pytest.mark.processes
def test_content_alone_tells_every_mutant_that_reads_differently(record: Path, tmp_path: Path) -> None:
    """The digest of the front left aside: the seal's own list against an independent reading of each mutant."""
    whole = record.read_bytes()
    rng = np.random.default_rng(7)
    count = 80
    for number in range(count):
        place = int(rng.integers(FRONT_BYTES, len(whole)))
        changed = bytes([whole[place] ^ int(rng.integers(1, 256))])
        (tmp_path / f"{number:04d}.h5").write_bytes(whole[:place] + changed + whole[place + 1 :])
    words: list[str] = []
    while len(words) < count:
        command = [sys.executable, "-c", CHILD, str(record), str(tmp_path), str(len(words))]
        done = subprocess.run(command, capture_output=True, text=True, check=False, timeout=120)
        words += [line.split()[1] for line in done.stdout.splitlines()]
        if done.returncode:
            words.append(f"ended by {done.returncode}")  # HDF5 hung or crashed: verify's child would say so
    assert "MISSED" not in words
    assert words.count("flagged") > count / 2, "the test would prove little if most mutants hit unused bytes"


@pytest.mark.parametrize(
    ("where", "alter"),
    [
        ("/channels/load/value: rows 0 to ", lambda f: f["channels/load/value"].__setitem__(3, 1e3)),
        ("/channels/sag/counts: rows 0 to ", lambda f: f["channels/sag/counts"].__setitem__(0, 1.0)),
        (
            "/channels/load/value: attributes",
            lambda f: f["channels/load/value"].attrs.__setitem__("units", "kN"),
        ),
        ("/: attributes", lambda f: f.attrs.__setitem__("simulated", np.uint8(0))),
        ("/result: attributes", lambda f: f["result"].attrs.__setitem__("peak_n", 1.0)),
        ("/stream: rows 0 to ", lambda f: f["stream"].__setitem__(5000, 7)),
        (
            "/seal: altered",
            lambda f: f["seal"].attrs.__setitem__("previous_record", fixed_text("kiln_A00_01.h5")),
        ),
        ("/events/json: missing", lambda f: f["events"].__delitem__("json")),
        ("/channels/extra: not in the seal's list", lambda f: f.create_group("channels/extra")),
        ("/channels is a link", lambda f: f.__setitem__("channels", h5py.SoftLink("/trace"))),
    ],
)
def test_what_was_edited_is_named(
    record: Path, tmp_path: Path, where: str, alter: Callable[[Any], None]
) -> None:
    def edit(file: Any) -> None:
        if "is a link" in where:
            del file["channels"]
        alter(file)

    report = check_contents(altered(record, tmp_path, edit, cover=False))
    assert where in report.first_bad


def flip_payload(entries: list[Entry]) -> list[Entry]:
    place = next(n for n, entry in enumerate(entries) if entry.kind is Kind.BLOCK and n > 100)
    entry = entries[place]
    payload = entry.payload[:-1] + bytes([entry.payload[-1] ^ 1])
    return [*entries[:place], replace(entry, payload=payload), *entries[place + 1 :]]


@pytest.mark.parametrize(
    ("where", "alter"),
    [
        ("/channels/load/value rows 0 to ", lambda f: f["channels/load/value"].__setitem__(3, 1e3)),
        ("/channels/load/index rows 0 to ", lambda f: f["channels/load/index"].__setitem__(0, 1)),
        ("differs from /stream", restream(flip_payload)),
        ("no ring_loss entry says so", restream(lambda entries: entries[:150] + entries[151:])),
        (
            "/stream byte",
            restream(lambda entries: [*entries[:150], entries[151], entries[150], *entries[152:]]),
        ),
        ("/stream byte", restream(lambda entries: [*entries[:150], entries[149], *entries[150:]])),
        ("/channels/load: [500] rows", restream(lambda entries: entries[:-20])),
        ("/stream after byte", lambda f: f["stream"].__setitem__(5000, 7)),
        ("/events: row 2", lambda f: f["events/json"].__setitem__(2, b"{}")),
    ],
)
def test_a_forger_who_mends_the_seal_is_given_away_by_the_entries(
    record: Path, tmp_path: Path, where: str, alter: Callable[[Any], None]
) -> None:
    report = check_contents(altered(record, tmp_path, alter, cover=True))
    assert where in "\n".join(report.problems)


@pytest.mark.parametrize(
    ("links", "word"),
    [
        ([{"received": 101, "recorded": 100, "rejected": {}}], "received 101, recorded 100 + rejected 0"),
        ([{"received": 99, "recorded": 99, "rejected": {}}], "recorded 99 rows, /stream holds 100"),
    ],
)
def test_received_must_be_recorded_plus_rejected(
    make_journal: Make, tmp_path: Path, links: list[dict[str, Any]], word: str
) -> None:
    bench = SyntheticBench()
    run = list(bench.run("A01", steps=20, closed=False))
    run += [bench.event("accounting", links=links), bench.event("run_closed", interrupted=False)]
    report = check_contents(sealed_run(make_journal, tmp_path, run))
    assert word in report.first_bad


def test_a_loss_that_was_declared_is_no_damage(make_journal: Make, tmp_path: Path) -> None:
    bench = SyntheticBench()
    run = list(bench.run("A01", steps=20, closed=False))[:-1]
    bench.sequence += 3
    run += [bench.event("ring_loss", "stop", entries=3), bench.event("run_closed", interrupted=True)]
    report = check_contents(sealed_run(make_journal, tmp_path, run))
    assert report.ok and report.gaps == 3


@pytest.mark.slow
@pytest.mark.processes
def test_verify_names_the_place_in_a_damaged_file_and_lives_through_hdf5(
    record: Path, tmp_path: Path
) -> None:
    assert verify(record).ok
    whole = record.read_bytes()
    with h5py.File(record, "r") as file:
        chunk = file["channels/load/value"].id.get_chunk_info(0)
        heart = (
            chunk.byte_offset + chunk.size // 2
        )  # of a compressed chunk; the offset counts from the file's begin
    damaged = tmp_path / "damaged.h5"
    damaged.write_bytes(whole[:heart] + bytes([whole[heart] ^ 255]) + whole[heart + 1 :])
    assert "/channels/load/value" in verify(damaged).first_bad
    damaged.write_bytes(whole[:FRONT_BYTES] + bytes(len(whole) - FRONT_BYTES))
    assert "HDF5 structure" in verify(damaged).first_bad


def foreign(path: Path) -> None:
    with h5py.File(path, "w") as file:
        file["x"] = [1, 2]


BAD_FILES: dict[str, tuple[Callable[[Path, bytes], object], str]] = {
    "empty": (lambda path, whole: path.write_bytes(b""), "empty"),
    "text": (lambda path, whole: path.write_bytes(b"hello " * 500), "not a sealed midspan record"),
    "foreign HDF5": (lambda path, whole: foreign(path), "HDF5 file of another kind"),
    "cut": (lambda path, whole: path.write_bytes(whole[:-100]), "truncated"),
    "cut in the front": (lambda path, whole: path.write_bytes(whole[:300]), "damaged"),
    "longer": (lambda path, whole: path.write_bytes(whole + b"x"), "longer than sealed"),
    "newer": (lambda path, whole: path.write_bytes(whole.replace(b"record 1\n", b"record 2\n", 1)), "newer"),
    "folder": (lambda path, whole: path.mkdir(), "cannot be read"),
    "absent": (lambda path, whole: None, "cannot be read"),
}


@pytest.mark.parametrize("name", BAD_FILES)
def test_what_is_no_sound_record_is_refused_in_one_line(name: str, record: Path, tmp_path: Path) -> None:
    path = tmp_path / "bad.h5"
    make, word = BAD_FILES[name]
    make(path, record.read_bytes())
    for read in (read_run, read_meta):
        with pytest.raises(RecordDamaged, match=word) as caught:
            read(path)
        assert "\n" not in str(caught.value)
    assert word in verify(path).first_bad


def test_the_seal_ties_a_record_to_the_one_before_and_to_the_journal(records: tuple[Path, ...]) -> None:
    with h5py.File(records[1], "r") as file:
        attrs = file["seal"].attrs
        assert plain_text(attrs["previous_record"]) == records[0].name
        assert plain_text(attrs["previous_sha256"]) == sha256_of(records[0])
        assert len(plain_text(attrs["journal_chain"])) == 64


def test_two_seals_of_the_same_run_are_the_same_bytes(
    make_journal: Make, tmp_path: Path, record: Path
) -> None:
    first = sealed_run(make_journal, tmp_path / "a", demo_entries(steps=10))
    second = sealed_run(make_journal, tmp_path / "b", demo_entries(steps=10))
    assert first.read_bytes() == second.read_bytes() != record.read_bytes()
