"""Compilers, terminals, pipes and links that misbehave, and mistakes of the tool itself: each in one sentence."""

from __future__ import annotations

import errno
import json
import os
import pty
import re
import select
import shutil
import stat
import subprocess
import sys
import time
from pathlib import Path

import pytest
from shipped import EXAMPLE

from export import commands, folder
from export.commands import main
from export.contents import MANIFEST
from export.targets.c import ways

ROOT = EXAMPLE.parent.parent
COMMAND = (sys.executable, "-m", "export.commands")


def small_plan(place: Path, write: str) -> Path:
    """A plan over a few invented rows."""
    rows = "\n".join(f"{x},{'ab'[x * x % 7 > 2]}" for x in range(40))
    (place / "rows.csv").write_text(f"x,kind\n{rows}\n")
    plan = place / "plan.toml"
    plan.write_text(
        f'model = "small"\n[rows]\nfile = "rows.csv"\nlabel = "kind"\n[release]\nwrite = ["{write}"]\n'
        '[prior]\nsd = 1.0\n[[input]]\nname = "x"\nrange = [0, 50]\n'
    )
    return plan


@pytest.fixture
def plan(tmp_path: Path) -> Path:
    return small_plan(tmp_path, "python")


def names(place: Path) -> list[str]:
    return sorted(entry.name for entry in place.iterdir())


def compilers(place: Path, monkeypatch: pytest.MonkeyPatch, script: str) -> None:
    """gcc is this script, and nothing else compiles."""
    (place / "gcc").write_text(f'#!/bin/sh\n[ "$1" = --version ] && {{ echo "gcc 1.0"; exit; }}\n{script}\n')
    (place / "gcc").chmod(0o755)
    which = shutil.which
    monkeypatch.setattr(ways.shutil, "which", lambda name: str(place / "gcc") if name == "gcc" else None)
    monkeypatch.setenv("REAL_GCC", which("gcc") or "gcc")


@pytest.mark.parametrize(
    ("script", "told"),
    [
        ("kill -SEGV $$", "the compiler was killed by signal 11"),
        ("sleep 600; echo never", "the compiler did not finish (stopped after 1 s)"),
        ("while :; do :; done", "the compiler did not finish (stopped after 1 s)"),
        ("cat >/dev/null; echo 'odd.c:1: error: odd' >&2; exit 4", "it does not compile: odd.c:1: error: odd"),
        ("printf '\\377\\033[2J error\\n' >&2; exit 1", "it does not compile: "),
        ('echo "a.c:1: warning: odd" >&2; exec $REAL_GCC "$@"', "it compiles with a warning: a.c:1: warning: odd"),
    ],
)
def test_compiler_that_misbehaves_fails_the_ship_and_the_old_release_stays(
    script: str, told: str, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    """The second compiler is a shell that waits for its own child: both must end, and in the time of one."""
    plan = small_plan(tmp_path, "c")
    assert main(["ship", str(plan)]) == 0
    before = (tmp_path / "release" / MANIFEST).read_bytes()
    compilers(tmp_path, monkeypatch, script)
    monkeypatch.setattr(ways, "SECONDS", 1)
    began = time.monotonic()
    capsys.readouterr()
    status = main(["ship", str(plan)])
    assert time.monotonic() - began < 30
    out, err = capsys.readouterr()
    assert (status, err) == (1, "")
    assert told in " ".join(out.split())
    assert [character for character in out if not character.isprintable() and character != "\n"] == []
    assert re.search("2 of [0-9]+ checks failed: nothing was written", out)
    assert (tmp_path / "release" / MANIFEST).read_bytes() == before


def test_temporary_folder_that_is_full_is_told_and_counts_as_not_run(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    from export.targets.c import runner

    def no_room(prefix: str) -> None:
        raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))

    monkeypatch.setattr(runner, "TemporaryDirectory", no_room)
    assert main(["ship", str(small_plan(tmp_path, "c"))]) == 1
    shown = " ".join(capsys.readouterr().out.split())
    assert "NOT RUN" in shown
    assert "no temporary folder to compile in (No space left on device); free space or set TMPDIR" in shown


def test_home_that_does_not_exist_and_no_environment_at_all_ship(plan: Path) -> None:
    for environment in ({"HOME": "/nowhere/at/all", "PATH": os.environ["PATH"]}, {}):
        done = subprocess.run(
            [*COMMAND, "ship", str(plan)], cwd=ROOT, env=environment, capture_output=True, text=True, check=False
        )
        assert (done.returncode, done.stderr) == (0, "")


def test_no_file_is_read_or_written_in_the_encoding_of_the_locale(tmp_path: Path) -> None:
    """PEP 597: Python warns where an encoding is left to the locale."""
    strict = [sys.executable, "-X", "warn_default_encoding", "-m", "export.commands"]
    release = tmp_path / "release"
    for arguments in (["ship", EXAMPLE / "plan.toml", "--into", release], ["check", release]):
        command = [*strict, *map(str, arguments)]
        done = subprocess.run(command, cwd=ROOT, capture_output=True, text=True, check=False)
        assert done.returncode == 0
        assert [line for line in done.stderr.splitlines() if line.startswith(str(ROOT)) and ".venv" not in line] == []


def test_ascii_locale_shows_a_path_in_another_script_as_escapes(tmp_path: Path) -> None:
    place = tmp_path / "насос"
    place.mkdir()
    ascii_only = {**os.environ, "LC_ALL": "C", "PYTHONUTF8": "0", "PYTHONCOERCECLOCALE": "0"}
    done = subprocess.run(
        [*COMMAND, "ship", str(small_plan(place, "python"))], cwd=ROOT, env=ascii_only, capture_output=True, check=False
    )
    assert (done.returncode, done.stderr) == (0, b"")
    assert done.stdout.isascii()
    assert (place / "release" / MANIFEST).exists()


def test_link_to_a_release_is_followed_and_stays_a_link(plan: Path, tmp_path: Path) -> None:
    (tmp_path / "far").mkdir()
    link = tmp_path / "release"
    link.symlink_to(tmp_path / "far" / "kept")
    for _ in range(2):  # at first it leads to nothing yet
        assert main(["ship", str(plan)]) == 0
        assert link.is_symlink()
        assert names(tmp_path / "far") == ["kept"]
        assert (link / MANIFEST).exists()


def test_link_that_leads_in_a_circle_is_refused(plan: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]) -> None:
    (tmp_path / "release").symlink_to("release")
    assert main(["ship", str(plan)]) == 2
    assert "is a link that leads in a circle; choose another --into" in capsys.readouterr().err


def test_release_that_holds_a_file_of_the_user_is_not_replaced(
    plan: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["ship", str(plan)]) == 0
    (tmp_path / "release" / "notes.txt").write_text("ours")
    (tmp_path / "release" / "__pycache__").mkdir()
    assert main(["ship", str(plan)]) == 2
    assert "is a release that also holds notes.txt, which would be lost; " in capsys.readouterr().err
    (tmp_path / "release" / "notes.txt").unlink()
    assert main(["ship", str(plan)]) == 0


def test_export_does_not_replace_a_release_that_was_shipped(
    plan: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str]
) -> None:
    assert main(["ship", str(plan)]) == 0
    release, sealed = tmp_path / "release", tmp_path / "release" / "small.sealed.json"
    before = names(release)
    assert main(["export", str(sealed), "--into", str(release)]) == 2
    assert "is a release with its checks, and an export has none; choose another" in capsys.readouterr().err
    assert names(release) == before
    for _ in range(2):
        assert main(["export", str(sealed), "--into", str(tmp_path / "artefacts")]) == 0


def test_folders_above_are_made_and_removed_again_where_nothing_was_released(
    plan: Path, tmp_path: Path, capsys: pytest.CaptureFixture[str], monkeypatch: pytest.MonkeyPatch
) -> None:
    place = tmp_path / "a" / "b" / "release"
    with monkeypatch.context() as broken:
        broken.setattr("export.check.differences", lambda *rest: (1, "planted"))
        assert main(["ship", str(plan), "--into", str(place)]) == 1
    assert not (tmp_path / "a").exists()
    assert main(["ship", str(plan), "--into", str(place)]) == 0
    assert names(place.parent) == ["release"]


def test_name_too_long_for_the_file_system_is_told(plan: Path, capsys: pytest.CaptureFixture[str]) -> None:
    assert main(["ship", str(plan), "--into", str(plan.parent / ("n" * 300))]) == 2
    assert "(File name too long); " in capsys.readouterr().err


def test_system_without_exchange_loses_no_release_between_its_two_steps(
    tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    """Where the run ends between the two, the next one finds the old folder and puts it back."""
    place = tmp_path / "release"
    place.mkdir()
    (place / "old").touch()
    monkeypatch.setattr(folder.sys, "platform", "other")
    rename = Path.rename

    def killed(self: Path, target: Path) -> Path:
        if target == place and not place.exists():
            raise SystemExit  # as if killed: no handler runs
        return rename(self, target)

    with folder.building(place) as staging:
        (staging / "new").touch()
        with monkeypatch.context() as dying:
            dying.setattr(Path, "rename", killed)
            with pytest.raises(SystemExit):
                folder.put_in_place(staging, place)
    assert not place.exists()
    with folder.building(place):
        assert names(place) == ["old"]
    with folder.building(place) as staging:
        (staging / "new").touch()
        folder.put_in_place(staging, place)
    assert (names(place), names(tmp_path)) == (["new"], ["release"])


def test_mistake_of_the_tool_is_one_sentence_and_a_traceback_where_asked_for(
    plan: Path, tmp_path: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def mistaken(request: object) -> int:
        raise KeyError("planted\nin two lines")

    monkeypatch.setattr(commands, "_ship", mistaken)
    assert main(["ship", str(plan)]) == 2
    error = capsys.readouterr().err
    line = mistaken.__code__.co_firstlineno + 1
    assert error == (
        f"this is a mistake in firmlogit: KeyError: 'planted\\nin two lines' (test_bad_days_machine.py, line {line}); "
        "please report it with what FIRMLOGIT_TRACEBACK=1 shows\n"
    )
    monkeypatch.setenv("FIRMLOGIT_TRACEBACK", "1")
    assert main(["ship", str(plan)]) == 2
    error = capsys.readouterr().err
    assert error.startswith("Traceback (most recent call last):")
    assert "this is a mistake in firmlogit" in error.splitlines()[-1]


@pytest.mark.parametrize(
    ("error", "sentence"),
    [
        (OSError(errno.EIO, os.strerror(errno.EIO), "/some/file"), "/some/file: cannot be used (Input/output error); "),
        (MemoryError(), "memory: found too little for these rows; "),
    ],
)
def test_machine_that_fails_is_one_sentence(
    error: Exception, sentence: str, plan: Path, monkeypatch: pytest.MonkeyPatch, capsys: pytest.CaptureFixture[str]
) -> None:
    def failing(request: object) -> int:
        raise error

    monkeypatch.setattr(commands, "_close_stdout", lambda: None)
    monkeypatch.setattr(commands, "_ship", failing)
    assert main(["ship", str(plan)]) == 2
    assert capsys.readouterr().err.startswith(sentence)


def test_output_that_cannot_be_written_is_told_and_a_reader_who_leaves_is_not(plan: Path, tmp_path: Path) -> None:
    """A full device; a pipe whose reader is gone; streams closed from the start."""
    with open("/dev/full", "w") as full:
        done = subprocess.run([*COMMAND, "ship", str(plan)], cwd=ROOT, stdout=full, stderr=subprocess.PIPE, text=True)
    assert done.returncode == 2
    assert re.fullmatch(r"this machine: cannot be used \(No space left on device\); .*\n", done.stderr)
    end, start = os.pipe()
    os.close(end)
    done = subprocess.run([*COMMAND, "ship", str(plan)], cwd=ROOT, stdout=start, stderr=subprocess.PIPE, text=True)
    os.close(start)
    assert (done.returncode, done.stderr) == (0, "")
    assert (tmp_path / "release" / MANIFEST).exists()
    shell = f"exec {sys.executable} -m export.commands check {tmp_path / 'release'} >&- 2>&-"
    assert subprocess.run(["sh", "-c", shell], cwd=ROOT).returncode == 0


def test_failed_check_is_1_though_nobody_reads_the_output(plan: Path, tmp_path: Path) -> None:
    assert main(["ship", str(plan)]) == 0
    (tmp_path / "release" / "HANDOFF.md").write_text("")
    end, start = os.pipe()
    os.close(end)
    assert subprocess.run([*COMMAND, "check", str(tmp_path / "release")], cwd=ROOT, stdout=start).returncode == 1
    os.close(start)


def on_terminal(command: list[str], **environment: str) -> tuple[int, str, str]:
    """Status, standard output (a pipe) and what a terminal of 80 columns on standard error received."""
    ours, theirs = pty.openpty()
    process = subprocess.Popen(
        command,
        cwd=ROOT,
        stdout=subprocess.PIPE,
        stderr=theirs,
        text=True,
        env={**os.environ, "TERM": "xterm-256color", "COLUMNS": "80", **environment},
    )
    os.close(theirs)
    shown = b""
    while True:
        if select.select([ours], [], [], 60)[0]:
            try:
                data = os.read(ours, 65536)
            except OSError:  # the last writer has closed it
                break
            if not data:
                break
            shown += data
    assert process.stdout is not None
    out = process.stdout.read()
    os.close(ours)
    return process.wait(), out, shown.decode()


def test_progress_is_on_a_terminal_alone_and_the_result_in_the_pipe(plan: Path) -> None:
    status, out, shown = on_terminal([*COMMAND, "ship", str(plan)])
    assert status == 0
    assert out.startswith("small ")
    assert "held out" in out
    assert "\x1b" not in out
    assert "running small.py" in shown
    assert shown.rstrip().endswith("\x1b[2K") or shown.endswith("\x1b[?25h") or "\x1b[?25h" in shown[-20:]
    assert "held out" not in shown


def test_progress_has_no_colour_where_none_is_wanted(plan: Path) -> None:
    colour = r"\x1b\[[0-9;]*3[0-8][0-9;]*m"
    _, _, with_colour = on_terminal([*COMMAND, "ship", str(plan)], NO_COLOR="")
    _, _, without = on_terminal([*COMMAND, "ship", str(plan)], NO_COLOR="1")
    assert re.search(colour, with_colour)
    assert not re.search(colour, without)
    assert "running small.py" in without


def test_commands_leave_the_umask_and_modes_as_a_reader_expects(plan: Path, tmp_path: Path) -> None:
    assert main(["ship", str(plan)]) == 0
    assert stat.S_IMODE((tmp_path / "release").stat().st_mode) == 0o755
    written = json.loads((tmp_path / "release" / MANIFEST).read_bytes())["files"]
    assert all(stat.S_IMODE((tmp_path / "release" / name).stat().st_mode) & 0o444 == 0o444 for name in written)
