"""Bad input of every command: one clear line on standard error, a code, and never a traceback."""

from __future__ import annotations

import os
import socket
from collections.abc import Iterator
from pathlib import Path
from tempfile import TemporaryDirectory

import pytest
from click.testing import CliRunner, Result

from daq.cards.load import example_path
from daq.cli import entry
from daq.cli.root import COMMANDS, midspan

FRAME = str(example_path("kiln-lane-a.toml"))
SERIES = str(example_path("demo-series.toml"))
METHOD = str(example_path("alumina-bars.toml"))
SHEET = str(example_path("demo-series.csv"))


@pytest.fixture(autouse=True)
def runtime(monkeypatch: pytest.MonkeyPatch, tmp_path: Path) -> Iterator[Path]:
    """Nobody is served here. A short path, since a socket's path has room for 107 bytes."""
    monkeypatch.chdir(tmp_path)
    (tmp_path / "folder").mkdir()
    (tmp_path / "text.h5").write_text("no record", encoding="utf-8")
    (tmp_path / "empty.h5").touch()
    (tmp_path / "broken.toml").write_text('card = "frame\n', encoding="utf-8")
    (tmp_path / "binary.toml").write_bytes(bytes(range(256)))
    with TemporaryDirectory(prefix="ms-") as short:
        folder = Path(short) / "r"
        monkeypatch.setenv("MIDSPAN_RUNTIME", str(folder))
        yield folder


def called(*words: str) -> Result:
    result = CliRunner().invoke(midspan, list(words))
    assert result.exception is None or isinstance(result.exception, SystemExit), result.exc_info
    return result


BAD = [
    (["bogus"], 2, "No such command 'bogus'; commands are demo, serve"),
    (["check"], 2, "name at least one card"),
    (["check", "--bogus"], 2, "No such option"),
    (["check", "--live"], 2, "name at least one card"),
    (["check", SERIES, "--live"], 2, "need a frame card"),
    (["check", FRAME, "--live"], 1, "there is no such port"),
    (["check", FRAME, "--polarity"], 1, "is not served"),
    (["check", FRAME, "--stop-drill"], 1, "is not served"),
    (["check", "--schema", "bogus"], 2, "'frame', 'method', 'series'"),
    (["check", "nothere.toml"], 1, "nothere.toml: file = cannot be read"),
    (["check", "broken.toml"], 1, "broken.toml"),
    (["check", "binary.toml"], 1, "binary.toml"),
    (["check", SHEET], 1, "TOML text"),
    (["serve"], 2, "Missing argument 'FRAME_CARD'"),
    (["serve", "nothere.toml"], 1, "cannot be read"),
    (["serve", "folder"], 2, "is a directory"),
    (["serve", METHOD], 1, "a frame card is wanted"),
    (["serve", FRAME, "--data", "text.h5"], 2, "is a file"),
    (["serve", FRAME, "--data", "text.h5/below"], 1, "name another with --data"),
    (["serve", FRAME, "--copy-to", "nothere"], 2, "does not exist"),
    (["run", SERIES], 1, "needs a terminal"),
    (["run"], 2, "Missing argument 'SERIES'"),
    (["watch"], 1, "no frame is served by this user"),
    (["watch", "--frame", "../x"], 1, "is not served"),
    (["watch", "--seconds", "soon"], 2, "not a valid float"),
    (["simulate", FRAME, "--bars", "wood"], 2, "shipped are only: alumina"),
    (["verify"], 2, "Missing argument"),
    (["verify", "nothere.h5"], 1, "nothere.h5 cannot be read"),
    (["verify", "text.h5"], 1, "text.h5 is not a sealed midspan record"),
    (["verify", "empty.h5"], 1, "empty.h5 is not a sealed midspan record"),
    (["verify", "folder"], 1, "folder is not a journal"),
    (["recover", "nothere"], 1, "no journal at nothere"),
    (["recover", "text.h5"], 1, "no journal at text.h5"),
    (["recover", "folder"], 1, "folder is not a journal"),
    (["export", "nothere.h5"], 1, "nothere.h5 cannot be read"),
    (["export", "text.h5"], 1, "text.h5 is not a sealed midspan record"),
    (["export", "text.h5", "--out", "empty.h5"], 2, "is a file"),
    (["demo", "--bars", "0"], 2, "0 is not in the range"),
    (["demo", "--bars", "many"], 2, "not a valid integer"),
    (["demo", "--out", "text.h5/below"], 1, "Not a directory"),
]


@pytest.mark.parametrize(("words", "code", "said"), BAD, ids=[" ".join(bad[0])[-40:] for bad in BAD])
def test_bad_input_is_one_line_and_a_code(words: list[str], code: int, said: str) -> None:
    result = called(*words)
    assert result.exit_code == code, result.output
    (line,) = result.stderr.splitlines()[-1:]
    assert said in line and line.startswith("midspan"), result.stderr
    cautions = [told for told in result.stderr.splitlines()[:-1] if not told.startswith("midspan serve: ! ")]
    assert not cautions, result.stderr


def test_every_fault_of_every_card_is_a_line() -> None:
    frame = Path(FRAME).read_text("utf-8").replace("capacity_n = 1000.0", "capacity_n = -1.0")
    Path("bad.toml").write_text(frame.replace('dialect = "lines"', 'dialect = "lies"'), encoding="utf-8")
    result = called("check", "bad.toml", "nothere.toml")
    lines = result.stderr.splitlines()
    assert result.exit_code == 1
    assert any("bad.toml: cell.capacity_n = -1.0" in line for line in lines)
    assert any("dialect" in line for line in lines)
    assert any("nothere.toml" in line for line in lines)
    assert all(line.startswith("midspan: ") for line in lines)


def test_a_check_changes_nothing() -> None:
    before = sorted(Path(".").rglob("*"))
    called("check", FRAME, "--live", "--data", "records")
    called("check", FRAME, SERIES)
    called("verify", "folder")
    called("recover", "folder")
    assert sorted(Path(".").rglob("*")) == before


def test_a_failed_start_leaves_no_doubt_behind(runtime: Path) -> None:
    """Nobody could have moved anything: the next start is not "unknown"."""
    result = called("serve", FRAME, "--data", "records", "--no-fifo")
    assert result.exit_code == 1 and "there is no such port" in result.stderr
    assert not Path("records/.spool/kiln-lane-a/running").exists()
    assert not list(runtime.glob("midspan/*/ring-*"))


def test_a_failed_start_after_an_unclean_end_keeps_the_doubt() -> None:
    mark = Path("records/.spool/kiln-lane-a/running")
    mark.parent.mkdir(parents=True)
    mark.touch()
    assert called("serve", FRAME, "--data", "records", "--no-fifo").exit_code == 1
    assert mark.exists()


def test_a_full_disk_is_one_line_at_the_start() -> None:
    Path("tiny").mkdir()
    if os.system("mount -t tmpfs -o size=24m tmpfs tiny 2>/dev/null"):
        pytest.skip("needs the right to mount a file system")
    try:
        result = called("serve", FRAME, "--data", "tiny")
    finally:
        os.system("umount tiny")
    assert result.exit_code == 1
    (line,) = result.stderr.splitlines()
    assert "MB free, at least" in line and "or name another folder with --data" in line


def test_cautions_are_said_at_the_check() -> None:
    result = called("check", str(example_path("kiln-lane-c.toml")))
    assert result.exit_code == 0
    assert "! frame kiln-lane-c: monitor only, midspan cannot stop this machine" in result.stdout


@pytest.mark.parametrize("name", [name for name in COMMANDS if name != "stop"])
def test_every_command_shows_help_at_once(name: str) -> None:
    result = called(name, "--help")
    assert result.exit_code == 0 and not result.stderr


def test_stop_words(capsys: pytest.CaptureFixture[str], runtime: Path) -> None:
    assert entry.stop(["--help"]) == 0
    assert "Example: midspan stop" in capsys.readouterr().out
    assert entry.stop(["a", "b"]) == entry.stop(["--hard"]) == 2
    assert entry.stop([]) == 1
    assert "no frame is served" in capsys.readouterr().err
    assert entry.stop(["nothere"]) == 1
    assert "nothere: no answer from the bench process - USE THE EMERGENCY STOP" in capsys.readouterr().err


def test_a_dead_daemons_stop_socket_is_no_answer(capsys: pytest.CaptureFixture[str], runtime: Path) -> None:
    folder = runtime / "midspan" / "lane"
    folder.mkdir(parents=True)
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as line:
        line.bind(str(folder / "stop"))
    assert entry.stop([]) == 1
    assert "lane: no answer" in capsys.readouterr().err
    assert os.listdir(folder) == ["stop"]


def test_words_on_the_stop_line_say_why_nothing_was_sent(runtime: Path) -> None:
    import json
    import threading

    from daq.station.stopline import send_stop, stop_frame

    folder = runtime / "midspan" / "lane"
    folder.mkdir(parents=True)
    with socket.socket(socket.AF_UNIX, socket.SOCK_DGRAM) as line:
        line.bind(str(folder / "stop"))
        line.settimeout(5.0)

        def answer(*answers: dict[str, object]) -> None:
            for said in answers:
                _, sender = line.recvfrom(256)
                line.sendto(json.dumps(said).encode(), sender)

        answers = ({"ok": True, "why": ""}, {"ok": False, "why": "monitor only"}, {"ok": True})
        bench = threading.Thread(target=answer, args=answers)
        bench.start()
        assert stop_frame("lane", "test") == ""
        assert stop_frame("lane", "test") == "monitor only"
        assert send_stop("lane", "test")
        bench.join()
