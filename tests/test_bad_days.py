"""A ship is cut short, or finds no room, or meets nine others: the old release or the new one is there, whole.

Every command runs in a process of its own, forked from one that has imported everything.
"""

from __future__ import annotations

import contextlib
import hashlib
import json
import os
import random
import shutil
import signal
import subprocess
from collections import Counter
from collections.abc import Iterator
from pathlib import Path

import pytest
from forked import Ended, Server

from export.check import check_release
from export.contents import MANIFEST

CAN_MOUNT = shutil.which("unshare") is not None and not subprocess.run(["unshare", "--mount", "true"]).returncode


@pytest.fixture(scope="module")
def server(tmp_path_factory: pytest.TempPathFactory, plans: tuple[Path, Path]) -> Iterator[Server]:
    """One process that forks for all tests here."""
    folder = tmp_path_factory.mktemp("streams")
    running = Server(folder)
    running.warm_up("ship", plans[0], "--into", folder / "release")
    yield running
    running.close()


@pytest.fixture(scope="module")
def plans(tmp_path_factory: pytest.TempPathFactory) -> tuple[Path, Path]:
    """Two plans over the same few invented rows, of two different models that differ in their prior alone."""
    folder = tmp_path_factory.mktemp("plans")
    rows = "\n".join(f"{x},{y},{'ab'[x * x % 7 > 2]}" for x, y in zip(range(40), range(3, 120, 3), strict=False))
    (folder / "rows.csv").write_text(f"x,y,kind\n{rows}\n")
    text = (
        'model = "small"\n[rows]\nfile = "rows.csv"\nlabel = "kind"\n[release]\nwrite = ["python"]\n'
        '[[input]]\nname = "x"\nrange = [0, 50]\n[[input]]\nname = "y"\nrange = [0, 150]\n[prior]\nsd = '
    )
    for name, sd in (("one", 1.0), ("two", 2.0)):
        (folder / f"{name}.toml").write_text(f"{text}{sd}\n")
    return folder / "one.toml", folder / "two.toml"


@pytest.fixture
def place(server: Server, plans: tuple[Path, Path], tmp_path: Path) -> Path:
    """A release of the first plan, alone in its folder."""
    place = tmp_path / "out" / "release"
    good(server.run("ship", plans[0], "--into", place))
    return place


def good(ended: Ended) -> None:
    assert (ended.status, ended.err) == (0, ""), ended


def names(folder: Path) -> list[str]:
    return sorted(entry.name for entry in folder.iterdir())


def whole(place: Path) -> str:
    """The id of the release, which must hold what its manifest says and nothing else."""
    manifest = json.loads((place / MANIFEST).read_bytes())
    found = {entry.name: hashlib.sha256(entry.read_bytes()).hexdigest() for entry in place.iterdir()}
    assert found.keys() == {*manifest["files"], MANIFEST}
    assert found | manifest["files"] == found
    assert all(check["ok"] for check in manifest["checks"])
    return str(manifest["model_id"])


def one_sentence(ended: Ended) -> str:
    assert ended.err.count("\n") == 1, ended.err
    assert "Traceback" not in ended.err
    return ended.err


def ids_and_seconds(server: Server, plans: tuple[Path, Path], place: Path) -> tuple[tuple[str, str], float]:
    """The ids of the two models, the first of them shipped last, and how long a ship takes."""
    old = whole(place)
    good(server.run("ship", plans[1], "--into", place))
    new = whole(place)
    ended = server.run("ship", plans[0], "--into", place)
    return (old, new), ended.seconds


def test_sigkill_at_200_random_moments_leaves_a_whole_release(
    server: Server, plans: tuple[Path, Path], place: Path
) -> None:
    """Half of the moments lie anywhere, half in the last sixth, where the folders change places."""
    ids, seconds = ids_and_seconds(server, plans, place)
    chance = random.Random(20)
    seen: Counter[tuple[int, bool]] = Counter()
    for trial in range(200):
        moment = seconds * (chance.random() if trial % 4 < 2 else 1 - chance.random() / 6)
        before = whole(place)
        ended = server.start("ship", plans[trial % 2], "--into", place).signal_after(moment, signal.SIGKILL)
        after = whole(place)
        assert after in (before, ids[trial % 2])
        assert [name for name in names(place.parent) if not name.startswith(".release.")] == ["release"]
        seen[ended.status, after == before] += 1
        if trial % 40 == 0:
            assert check_release(place).ok
    assert seen[-signal.SIGKILL, True] > 20  # killed, the old one stayed
    assert check_release(place).ok
    good(server.run("ship", plans[0], "--into", place))
    assert names(place.parent) == ["release"]


def test_sigkill_at_each_operation_on_files_leaves_a_whole_folder(
    server: Server, plans: tuple[Path, Path], place: Path, tmp_path: Path
) -> None:
    """`export` builds and exchanges folders as `ship` does, and is over sooner."""
    good(server.run("ship", plans[1], "--into", tmp_path / "other"))
    sealed = tmp_path / "small.sealed.json", tmp_path / "other" / "small.sealed.json"
    shutil.copy(place / "small.sealed.json", sealed[0])
    into = tmp_path / "export" / "artefacts"
    for source in sealed:
        good(server.run("export", source, "--into", into))
    ids: Counter[tuple[str, int]] = Counter()
    killed = 0
    for at in range(1, 1000):
        before = whole(into)
        ended = server.run("export", sealed[at % 2], "--into", into, kill_at=at, beside=str(into.parent))
        after = whole(into)
        assert after == before or after == json.loads((into / MANIFEST).read_bytes())["model_id"]
        assert [name for name in names(into.parent) if not name.startswith(".artefacts.")] == ["artefacts"]
        ids[after, at % 2] += 1
        killed += ended.status == -signal.SIGKILL
        if ended.status == 0:
            break
    assert killed > 40
    assert len(ids) > 2  # some were killed before the exchange, and some after it
    assert names(into.parent) == ["artefacts"]


@pytest.mark.parametrize(
    ("number", "status", "called"),
    [(signal.SIGINT, 130, "Ctrl-C"), (signal.SIGTERM, 143, "SIGTERM"), (signal.SIGHUP, 129, "SIGHUP")],
)
def test_ship_stopped_by_a_signal_says_in_one_sentence_what_is_there(
    number: signal.Signals, status: int, called: str, server: Server, plans: tuple[Path, Path], place: Path
) -> None:
    ids, seconds = ids_and_seconds(server, plans, place)
    chance = random.Random(int(number))
    stopped = 0
    for trial in range(30):
        before = whole(place)
        moment = 0.01 + seconds * (chance.random() if trial % 3 else 1 - chance.random() / 6)
        ended = server.start("ship", plans[trial % 2], "--into", place).signal_after(moment, number)
        after = whole(place)
        assert names(place.parent) == ["release"]
        if ended.status == 0:
            assert (after, ended.err) == (ids[trial % 2], "")
            continue
        stopped += 1
        assert ended.status == status, ended
        sentence = one_sentence(ended)
        if after == before and ids[trial % 2] != before:
            assert sentence == f"stopped by {called}; what was in {place} before is as it was\n"
        else:
            assert sentence.startswith(f"stopped by {called}; ")
    assert stopped >= 10
    assert check_release(place).ok


@pytest.mark.parametrize("command", ["check", "fit", "export", "score", "ship"])
def test_every_command_stopped_by_sigterm_ends_with_143_and_leaves_nothing(
    command: str, server: Server, plans: tuple[Path, Path], place: Path, tmp_path: Path
) -> None:
    """SIGTERM comes while the command waits for a pipe that nobody fills, in the place of its first file."""
    (tmp_path / "piped").mkdir()
    pipe = tmp_path / "piped" / (MANIFEST if command == "check" else "file")
    os.mkfifo(pipe)
    arguments = {
        "check": [pipe.parent],
        "fit": [pipe, "--into", tmp_path / "fitted"],
        "export": [pipe, "--into", tmp_path / "exported"],
        "score": [pipe, plans[0].with_name("rows.csv")],
        "ship": [pipe, "--into", place],
    }[command]
    before = names(tmp_path)
    ended = server.start(command, *arguments).signal_after(0.3, signal.SIGTERM)
    assert ended.status == 143, ended
    assert one_sentence(ended).startswith("stopped by SIGTERM")
    assert (names(tmp_path), names(place.parent)) == (before, ["release"])


@pytest.mark.parametrize("count", [2, 10])
@pytest.mark.parametrize("there_before", [True, False])
def test_ships_at_once_into_one_folder_all_end_well_and_one_release_stays(
    count: int, there_before: bool, server: Server, plans: tuple[Path, Path], place: Path
) -> None:
    if not there_before:
        shutil.rmtree(place.parent)
    running = [server.start("ship", plans[position % 2], "--into", place) for position in range(count)]
    for command in running:
        good(command.end())
    whole(place)
    assert names(place.parent) == ["release"]
    assert check_release(place).ok


@contextlib.contextmanager
def file_system(folder: Path, *options: str) -> Iterator[None]:
    """A small file system of its own, mounted on a folder."""
    subprocess.run(["mount", "-t", "tmpfs", "-o", ",".join(options), "small", str(folder)], check=True)
    try:
        yield
    finally:
        subprocess.run(["umount", str(folder)], check=True)


@pytest.mark.parametrize("largest", [600, 2_000, 5_000, 8_000])
def test_file_that_may_not_grow_so_large_leaves_the_old_release(
    largest: int, server: Server, plans: tuple[Path, Path], place: Path
) -> None:
    """A limit of the process on the size of a file: the file system answers in the middle of a write, as a full one."""
    old = whole(place)
    ended = server.run("ship", plans[1], "--into", place, largest_file=largest, out="/dev/null")
    assert ended.status == 2, ended
    todo = "allow larger files there, or choose another --into"
    assert one_sentence(ended) == f"{place}: cannot be written (File too large); {todo}\n"
    assert (whole(place), names(place.parent)) == (old, ["release"])


if CAN_MOUNT:

    def test_full_disk_leaves_the_old_release_and_says_so(
        server: Server, plans: tuple[Path, Path], tmp_path: Path
    ) -> None:
        with file_system(tmp_path, "size=1m"):
            place = tmp_path / "release"
            good(server.run("ship", plans[0], "--into", place))
            old = whole(place)
            free = shutil.disk_usage(tmp_path).free
            for left in (0, 4096, 12288, 40960):
                (tmp_path / "filler").write_bytes(bytes(free - left))
                ended = server.run("ship", plans[1], "--into", place)
                assert ended.status == 2, ended
                assert f"{place}: cannot be written (No space left on device); free space" in one_sentence(ended)
                assert (whole(place), names(tmp_path)) == (old, ["filler", "release"])
            (tmp_path / "filler").unlink()
            good(server.run("ship", plans[1], "--into", place))
            assert whole(place) != old

    def test_read_only_file_system_is_told_in_one_sentence(
        server: Server, plans: tuple[Path, Path], place: Path
    ) -> None:
        with file_system(place, "ro", "size=1m"):
            for command, source in (("ship", plans[1]), ("fit", plans[1])):
                ended = server.run(command, source, "--into", place / "inner")
                assert ended.status == 2
                told = f"{place / 'inner'}: cannot be written (Read-only file system); allow writing there"
                assert one_sentence(ended).startswith(told)
        assert check_release(place).ok


@pytest.mark.parametrize("command", ["ship", "fit", "export"])
def test_folder_without_the_right_to_write_is_told_in_one_sentence(
    command: str, server: Server, plans: tuple[Path, Path], place: Path
) -> None:
    """Root gives up its right to pass over file modes first, so that the mode counts."""
    source = place / "small.sealed.json" if command == "export" else plans[1]
    old = whole(place)
    place.parent.chmod(0o555)
    into = {"ship": place, "fit": place.parent, "export": place.with_name("artefacts")}[command]
    ended = server.run(command, source, "--into", into, obey_modes=True)
    place.parent.chmod(0o755)
    assert ended.status == 2, ended
    assert one_sentence(ended).startswith(f"{into}: cannot be written (Permission denied); allow writing there")
    assert (whole(place), names(place.parent)) == (old, ["release"])


def test_release_is_checked_and_scored_where_nothing_may_be_written(
    server: Server, plans: tuple[Path, Path], place: Path
) -> None:
    place.chmod(0o555)
    good(server.run("check", place, obey_modes=True))
    good(server.run("score", place / "small.sealed.json", plans[0].with_name("rows.csv"), obey_modes=True))
    place.chmod(0o755)
    whole(place)
