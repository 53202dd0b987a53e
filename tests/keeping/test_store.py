"""The store of results: what was put comes back; nothing damaged, foreign or hostile is believed."""

from __future__ import annotations

import os
import pickle
import random
import sqlite3
import subprocess
import sys
from collections.abc import Iterator
from pathlib import Path

import numpy as np
import pytest

from campaign.keeping.program import digest_of, program_digest
from campaign.keeping.store import FILE_NAME, FOLDER_VARIABLE, Store, cache_file, open_store
from campaign.keeping.value_codec import encode
from campaign.notices import Notice

FLIPS = 600
NOTICE = Notice("blank-line", "noted", "a.csv", 3, None, "an empty line", "passed over")


class Said:
    """What a store says of itself."""

    def __init__(self) -> None:
        self.sentences: list[str] = []

    def __call__(self, sentence: str) -> None:
        self.sentences.append(sentence)


@pytest.fixture
def said() -> Said:
    return Said()


@pytest.fixture
def file(tmp_path: Path) -> Path:
    return tmp_path / "deep" / FILE_NAME


def entries() -> dict[str, object]:
    """Values by key, of a size that some of them take pages of their own."""
    draws = np.random.default_rng(4)
    return {
        digest_of([f"entry {number}"]): (NOTICE, {"values": draws.normal(size=20 * number)}, f"text {number}")
        for number in range(30)
    }


def filled(file: Path) -> dict[str, bytes]:
    """Fill a store and return what encodes each of its values."""
    with open_store(file) as store:
        for key, value in entries().items():
            assert store.put(key, value, "content")
    return {key: encode(value) for key, value in entries().items()}


def found(store: Store, keys: Iterator[str] | dict[str, bytes]) -> dict[str, bytes]:
    return {key: encode(values["content"]) for key, values in store.get_many(list(keys)).items()}


def test_what_was_put_is_found_by_the_next_run(file: Path, said: Said) -> None:
    expected = filled(file)
    with open_store(file, said) as store:
        assert found(store, expected) == expected
        assert store.get(next(iter(expected)), "other content") is None
        assert store.get("no such key") is None
        assert store.holds([*expected, "no such key"]) == set(expected)
    assert said.sentences == []


def test_without_a_path_nothing_is_kept(said: Said) -> None:
    with open_store(None, said) as store:
        assert not store.is_open
        assert not store.put("key", 1)
        assert store.get("key") is None
    assert said.sentences == []


def test_what_cannot_be_kept_is_not(file: Path, said: Said) -> None:
    with open_store(file, said) as store:
        assert not store.put("key", print)
        assert store.put("other", 1)
        assert (store.get("key"), store.get("other")) == (None, 1)
    assert said.sentences == []


def test_of_600_single_bit_flips_none_is_believed(file: Path, said: Said) -> None:
    """Every value that is found after a flip is, to the byte, the one that was put; the rest is not found."""
    expected = filled(file)
    whole = file.read_bytes()
    chance = random.Random(11)
    lost = 0
    for _ in range(FLIPS):
        place = chance.randrange(len(whole) * 8)
        damaged = bytearray(whole)
        damaged[place // 8] ^= 1 << place % 8
        file.write_bytes(damaged)
        with open_store(file, said) as store:
            after = found(store, expected)
        assert after.items() <= expected.items(), f"bit {place} was believed"
        lost += len(after) < len(expected)
    assert lost > FLIPS / 2, "most flips hit something that is noticed"
    assert len(said.sentences) > 0.9 * lost, "a flip in the text of a key makes an entry unfindable, no more"


def test_damage_is_said_and_the_file_begun_anew(file: Path, said: Said) -> None:
    expected = filled(file)
    whole = file.read_bytes()
    value = next(reversed(expected.values()))
    place = whole.index(value[40:80])
    file.write_bytes(whole[:place] + bytes([whole[place] ^ 4]) + whole[place + 1 :])
    with open_store(file, said) as store:
        assert store.get_many(list(expected)) == {}
        assert store.put("key", 1)
    assert len(said.sentences) == 1
    assert "thrown away" in said.sentences[0]
    with open_store(file, said) as store:
        assert store.get("key") == 1


@pytest.mark.parametrize("content", [b"no database at all, but words", os.urandom(9000)])
def test_a_file_that_is_no_database_is_thrown_away(file: Path, said: Said, content: bytes) -> None:
    file.parent.mkdir()
    file.write_bytes(content)
    with open_store(file, said) as store:
        assert store.put("key", 1)
        assert store.get("key") == 1
    assert [sentence.count("thrown away") for sentence in said.sentences] == [1]


@pytest.mark.parametrize(
    "statement",
    [
        "CREATE TABLE songs (title TEXT)",
        "CREATE TABLE kept (key TEXT, content TEXT, used INTEGER, size INTEGER, mark BLOB, value BLOB)",
        "CREATE VIEW kept AS SELECT 1 AS key",
    ],
)
def test_a_database_of_others_is_thrown_away(file: Path, said: Said, statement: str) -> None:
    file.parent.mkdir()
    foreign = sqlite3.connect(file)
    foreign.execute(statement)
    foreign.commit()
    foreign.close()
    with open_store(file, said) as store:
        assert store.get("key") is None
        assert store.put("key", 1)
    assert [sentence.count("not one of ours") for sentence in said.sentences] == [1]


class Hostile:
    """What runs a command when it is unpickled without care."""

    def __reduce__(self) -> tuple[object, tuple[str]]:
        return os.system, ("touch hostile-was-here",)


@pytest.mark.parametrize("protocol", [0, 2, 5])
def test_a_hostile_pickle_with_a_good_check_value_is_refused(
    file: Path, said: Said, protocol: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    monkeypatch.chdir(tmp_path)
    with open_store(file, said) as store:
        assert store.put_bytes("key", pickle.dumps(Hostile(), protocol))
    with open_store(file, said) as store:
        assert store.get("key") is None
    assert not (tmp_path / "hostile-was-here").exists()
    assert [sentence.count("nothing in it is believed") for sentence in said.sentences] == [1]


def test_a_second_run_goes_without(file: Path, said: Said) -> None:
    expected = filled(file)
    with open_store(file) as first, open_store(file, said) as second:
        assert second.get_many(list(expected)) == {}
        assert not second.put("key", 1)
        assert found(first, expected) == expected
    assert [sentence.count("another run is using it") for sentence in said.sentences] == [1]


def test_another_process_goes_without_too(file: Path) -> None:
    script = (
        "import sys, pathlib; from campaign.keeping.store import open_store; "
        "print(open_store(pathlib.Path(sys.argv[1])).is_open)"
    )
    with open_store(file):
        run = subprocess.run([sys.executable, "-c", script, file], capture_output=True, text=True, check=True)
    assert run.stdout == "False\n"
    assert "another run is using it" in run.stderr


def test_a_folder_that_cannot_be_written_to_is_said(tmp_path: Path, said: Said) -> None:
    (tmp_path / "file").write_text("in the way")
    with open_store(tmp_path / "file" / FILE_NAME, said) as store:
        assert not store.put("key", 1)
    assert [sentence.count("is not used") for sentence in said.sentences] == [1]


def test_a_run_that_is_killed_leaves_what_it_had_written_down(file: Path, said: Said) -> None:
    script = (
        "import sys, os, pathlib; from campaign.keeping import store as s; s.PUTS_A_COMMIT = 10\n"
        "store = s.open_store(pathlib.Path(sys.argv[1]))\n"
        "for number in range(25): store.put(str(number), number)\n"
        "os._exit(9)"
    )
    run = subprocess.run([sys.executable, "-c", script, file], check=False)
    assert run.returncode == 9
    with open_store(file, said) as store:
        assert [store.get(str(number)) for number in range(25)] == [*range(20), *[None] * 5]
    assert said.sentences == []


def test_what_was_not_used_for_longest_is_dropped(file: Path, said: Said) -> None:
    block = np.zeros(12_500)  # 100 kB
    with open_store(file, said, largest_bytes=1_000_000) as store:
        for number in range(9):
            store.put(str(number), block)
    later = Store(file, said, largest_bytes=1_000_000)
    later._today += 1
    assert later.get("0") is not None
    for number in range(9, 13):
        later.put(str(number), block)
    later.close()
    with open_store(file, said) as store:
        left = store.holds([str(number) for number in range(13)])
    assert left == {"0", *map(str, range(7, 13))}
    assert file.stat().st_size < 1_100_000
    assert said.sentences == []


def test_the_variable_names_another_folder(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setenv(FOLDER_VARIABLE, str(tmp_path))
    assert cache_file() == tmp_path / FILE_NAME
    monkeypatch.delenv(FOLDER_VARIABLE)
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path / "users"))
    assert cache_file().name == FILE_NAME
    assert "campaign-report" in cache_file().parts


def test_digests_tell_where_one_part_ends() -> None:
    assert digest_of(["ab", "c"]) != digest_of(["a", "bc"])
    assert digest_of(["ab", "c"]) == digest_of([b"ab", b"c"])
    assert len(program_digest()) == 64
