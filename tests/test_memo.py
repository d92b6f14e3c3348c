"""The memo: what is kept comes back bit by bit or not at all, and the bound holds."""

from __future__ import annotations

import hashlib
import io
import os
import pickle
import subprocess
import sys
import zipfile
from concurrent.futures import ThreadPoolExecutor
from pathlib import Path

import numpy as np
import pytest
from hypothesis import given
from hypothesis import strategies as st
from hypothesis.extra import numpy as hnp

import sweep.query.memo as memo_module
from sweep.errors import InputError
from sweep.query.memo import Memo, array_text, text_array
from sweep.query.memo_entry import HEAD_BYTES, MAGIC

pytestmark = pytest.mark.usefixtures("memo_is_on")

ANSWER = {
    "worst": np.linspace(-1, 1, 300).reshape(3, 100).astype(np.float32),
    "at": np.arange(12, dtype=np.int16).reshape(2, 6),
    "label": np.array(["cold", "warm"]),
    "found": np.array(True),
}


@pytest.fixture
def memo(tmp_path):
    return Memo(tmp_path / "answers", 10**6)


def same(found, expected):
    return (
        found is not None
        and found.keys() == expected.keys()
        and all(
            a.dtype == b.dtype and a.shape == b.shape and a.tobytes() == b.tobytes()
            for a, b in ((found[name], expected[name]) for name in expected)
        )
    )


def files(memo):
    return sorted(memo.folder.iterdir()) if memo.folder.is_dir() else []


def kept(memo, question=1):
    """One entry of the memo: its key and its file."""
    key = memo.key({"q": question})
    memo.put(key, ANSWER)
    return key, memo.folder / f"{key}.memo"


def test_arrays_come_back_as_they_were_put(memo):
    key, path = kept(memo)
    assert same(memo.get(key), ANSWER)
    assert files(memo) == [path]


@given(
    st.dictionaries(
        st.sampled_from("abc"),
        hnp.arrays(
            hnp.scalar_dtypes(), hnp.array_shapes(min_dims=0, max_dims=4, min_side=0, max_side=4)
        ),
        max_size=3,
    )
)
def test_any_arrays_of_numbers_come_back_bit_by_bit(tmp_path_factory, arrays):
    memo = Memo(tmp_path_factory.getbasetemp() / "any", 10**6)
    key = memo.key({"q": "any"})
    memo.put(key, arrays)
    assert same(memo.get(key), arrays)


def test_a_text_comes_back(memo):
    memo.put(memo.key({}), {"text": text_array("ζ of 0.02\n")})
    assert array_text(memo.get(memo.key({}))["text"]) == "ζ of 0.02\n"
    assert array_text(text_array("")) == ""


def test_the_order_of_a_question_does_not_matter_and_everything_else_does(memo):
    same_key = memo.key({"a": 1, "b": [0.1, "x"]})
    assert same_key == memo.key({"b": [0.1, "x"], "a": 1})
    others = [
        {"a": 1, "b": [np.nextafter(0.1, 1), "x"]},
        {"a": 1.0, "b": [0.1, "x"]},
        {"a": 1, "b": ["x", 0.1]},
        {"a": 1, "b": [0.1, "x"], "memo": 9},
    ]
    assert len({same_key, *(memo.key(other) for other in others)}) == 5


def test_answers_of_another_program_or_layout_are_not_found(memo, monkeypatch):
    key = memo.key({"q": 1})
    monkeypatch.setattr(memo_module, "_program", lambda: "another")
    assert memo.key({"q": 1}) != key
    monkeypatch.undo()
    monkeypatch.setattr(memo_module, "LAYOUT", 2)
    assert memo.key({"q": 1}) != key


def test_the_program_is_known_by_the_sources_that_answer(tmp_path, monkeypatch):
    monkeypatch.setattr(memo_module, "__file__", str(tmp_path / "query" / "memo.py"))
    source = tmp_path / "query" / "answers" / "limits.py"
    source.parent.mkdir(parents=True)
    found = []
    for text in ("x = 1", "x = 2", "x = 1"):
        source.write_text(text)
        memo_module._program.cache_clear()
        found.append(memo_module._program())
    memo_module._program.cache_clear()
    assert found[0] == found[2] != found[1]


def test_nan_is_no_part_of_a_question(memo):
    with pytest.raises(ValueError, match="nan"):
        memo.key({"at": float("nan")})


def damages():
    yield "empty", lambda data: data[:0]
    yield "a foreign file", lambda data: b"notes of somebody else\n" * len(data)
    yield "something appended", lambda data: data + b"\0"
    yield "a bare npz", lambda data: data[HEAD_BYTES:]
    for cut in (1, 7, 8, 39, 40, 41, 200):
        yield f"cut to {cut}", lambda data, cut=cut: data[:cut]
    yield "the last byte gone", lambda data: data[:-1]


@pytest.mark.parametrize("damage", [d for _, d in damages()], ids=[name for name, _ in damages()])
def test_a_damaged_entry_is_removed_and_made_again(memo, damage):
    key, path = kept(memo)
    path.write_bytes(damage(path.read_bytes()))
    assert memo.get(key) is None
    assert files(memo) == []
    memo.put(key, ANSWER)
    assert same(memo.get(key), ANSWER)


def test_no_flipped_bit_goes_unnoticed(memo):
    """Every byte of head, digest and of each seventh after them."""
    key, path = kept(memo)
    whole = path.read_bytes()
    places = [*range(60), *range(60, len(whole), 7), len(whole) - 1]
    believed = []
    for place in places:
        flipped = bytearray(whole)
        flipped[place] ^= 1 << place % 8
        path.write_bytes(flipped)
        if memo.get(key) is not None or path.exists():
            believed.append(place)
    assert believed == []


def test_an_entry_under_another_key_is_not_believed(memo):
    _, path = kept(memo)
    other = memo.key({"q": 2})
    path.rename(memo.folder / f"{other}.memo")
    assert memo.get(other) is None
    assert files(memo) == []


class _Trap:
    def __init__(self, mark):
        self.mark = mark

    def __reduce__(self):
        return (Path.touch, (self.mark,))


def planted_payloads(mark):
    """Payloads that would make ``mark`` if a pickle were read; the first proves that they work."""
    yield pickle.dumps(_Trap(mark))
    for save in (np.save, np.savez):
        held = io.BytesIO()
        save(held, np.array([_Trap(mark)], object), allow_pickle=True)
        yield held.getvalue()


def sealed(key, payload):
    """An entry that passes every checksum."""
    return MAGIC + hashlib.sha256(key.encode() + payload).digest() + payload


def test_an_entry_is_a_head_a_sha256_and_what_numpy_wrote(memo):
    key, path = kept(memo)
    whole = path.read_bytes()
    assert whole == sealed(key, whole[HEAD_BYTES:])
    assert same(dict(np.load(io.BytesIO(whole[HEAD_BYTES:]), allow_pickle=False)), ANSWER)


def test_a_planted_pickle_is_never_loaded(memo, tmp_path):
    mark = tmp_path / "ran"
    payloads = list(planted_payloads(mark))
    pickle.loads(payloads[0])
    assert mark.exists()
    mark.unlink()
    key, path = kept(memo)
    for payload in payloads:
        path.write_bytes(sealed(key, payload))
        assert memo.get(key) is None
        assert not path.exists()
        assert not mark.exists()


def test_a_sealed_entry_of_other_things_is_removed(memo):
    array = io.BytesIO()
    np.save(array, np.arange(3))
    key, path = kept(memo)
    zipped = io.BytesIO()
    with zipfile.ZipFile(zipped, "w") as file:
        file.writestr("letter.txt", "hello")
    for payload in (array.getvalue(), zipped.getvalue(), b"", b"PK\x03\x04 and no more"):
        path.write_bytes(sealed(key, payload))
        assert memo.get(key) is None
        assert not path.exists()


def test_objects_are_refused_and_leave_nothing(memo):
    with pytest.raises(ValueError, match="allow_pickle"):
        memo.put(memo.key({}), {"a": np.array([object()])})
    assert files(memo) == []


def test_the_bound_holds_and_the_entries_used_longest_ago_go_first(tmp_path):
    memo = Memo(tmp_path, 50_000)
    keys = [memo.key({"q": n}) for n in range(20)]
    for n, key in enumerate(keys):
        memo.put(key, {"a": np.full(1000, n, float)})
        os.utime(tmp_path / f"{key}.memo", ns=(n, n)) if n < 5 else None
        assert memo.facts().bytes <= 50_000
        if n == 4:
            assert memo.get(keys[0]) is not None
        if n == 7:
            found = [memo.get(k) is not None for k in keys[:5]]
            assert found == [True, False, False, True, True]
    assert memo.get(keys[-1]) is not None
    assert memo.facts().entries == 6


def test_a_smaller_bound_holds_from_the_next_entry_on(tmp_path):
    large, small = Memo(tmp_path, 10**6), Memo(tmp_path, 9000)
    for n in range(8):
        large.put(large.key({"q": n}), {"a": np.zeros(400)})
    small.put(small.key({"q": 9}), {"a": np.zeros(100)})
    assert small.facts().bytes <= 9000
    assert small.get(small.key({"q": 9})) is not None


@pytest.mark.parametrize(("values", "is_kept"), [(2400, True), (2500, False), (3200, False)])
def test_nothing_larger_than_a_quarter_of_the_bound_is_kept(tmp_path, values, is_kept):
    memo = Memo(tmp_path, 80_000)
    memo.put(memo.key({}), {"a": np.zeros(values)})
    assert (memo.get(memo.key({})) is not None) == is_kept
    assert len(files(memo)) == is_kept


def refuse(*_arguments, **_options):
    raise OSError(28, "No space left on device")


@pytest.mark.parametrize("where", ["numpy.savez", "pathlib.Path.replace", "pathlib.Path.mkdir"])
def test_a_disk_that_refuses_costs_the_entry_and_nothing_else(memo, monkeypatch, where):
    key, _ = kept(memo)
    monkeypatch.setattr(where, refuse)
    memo.put(memo.key({"q": 2}), ANSWER)
    monkeypatch.undo()
    assert memo.get(memo.key({"q": 2})) is None
    assert same(memo.get(key), ANSWER)
    assert len(files(memo)) == 1


def test_a_memo_that_may_only_be_read_still_answers(memo, monkeypatch):
    key, path = kept(memo)
    for where in ("os.utime", "pathlib.Path.unlink", "pathlib.Path.mkdir"):
        monkeypatch.setattr(where, refuse)
    assert same(memo.get(key), ANSWER)
    memo.put(memo.key({"q": 2}), ANSWER)
    path.write_bytes(b"damaged")
    assert memo.get(key) is None


@pytest.mark.skipif(os.geteuid() == 0, reason="root writes everywhere")
def test_a_folder_that_may_only_be_read_is_no_error(memo):
    key, _ = kept(memo)
    memo.folder.chmod(0o500)
    try:
        memo.put(memo.key({"q": 2}), ANSWER)
        assert same(memo.get(key), ANSWER)
        assert memo.facts().entries == 1
    finally:
        memo.folder.chmod(0o700)


def test_a_folder_that_cannot_be_is_an_empty_memo(tmp_path):
    (tmp_path / "file").write_text("in the way")
    memo = Memo(tmp_path / "file" / "answers")
    memo.put(memo.key({}), ANSWER)
    assert memo.get(memo.key({})) is None
    assert memo.facts().entries == 0
    assert memo.clear() == (0, 0)


def test_clearing_removes_what_the_memo_made_and_nothing_else(memo):
    sizes = [kept(memo, n)[1].stat().st_size for n in range(3)]
    (memo.folder / "notes.txt").write_text("mine")
    (memo.folder / f"{'a' * 64}.{'b' * 32}.partial").write_bytes(b"left by a killed writer")
    assert memo.clear() == (3, sum(sizes))
    assert [path.name for path in files(memo)] == ["notes.txt"]
    assert memo.clear() == (0, 0)


def test_what_killed_writers_left_is_removed_once_it_is_old(memo):
    memo.folder.mkdir()
    old, new = (memo.folder / f"{'a' * 64}.{c * 32}.partial" for c in "bc")
    for path in (old, new):
        path.write_bytes(b"half")
    os.utime(old, (1, 1))
    kept(memo)
    assert not old.exists()
    assert new.exists()


def test_threads_that_put_and_get_the_same_find_it_whole_or_not_at_all(tmp_path):
    memo = Memo(tmp_path, 30_000)
    keys = [memo.key({"q": n}) for n in range(8)]
    answers = [{"a": np.full(800, n, float)} for n in range(8)]

    def work(seed):
        for n in np.random.default_rng(seed).integers(0, 8, 60):
            memo.put(keys[n], answers[n])
            found = memo.get(keys[n])
            assert found is None or same(found, answers[n])

    with ThreadPoolExecutor(4) as pool:
        list(pool.map(work, range(4)))
    assert memo.facts().bytes <= 30_000
    assert all(path.suffix == ".memo" for path in files(memo))


WRITER = """
import sys, numpy as np
from pathlib import Path
from sweep.query.memo import Memo
memo = Memo(Path(sys.argv[1]), 40_000)
for turn in range(80):
    for n in range(6):
        key = memo.key({"q": n})
        found = memo.get(key)
        assert found is None or (found["a"] == n).all() and found["a"].size == 1000
        memo.put(key, {"a": np.full(1000, n, float)})
"""


def test_two_processes_share_a_memo(tmp_path):
    running = [subprocess.Popen([sys.executable, "-c", WRITER, str(tmp_path)]) for _ in range(2)]
    assert [process.wait(60) for process in running] == [0, 0]
    memo = Memo(tmp_path, 40_000)
    assert memo.facts().bytes <= 40_000
    assert all(path.suffix == ".memo" for path in files(memo))


@pytest.mark.parametrize("word", ["0", "off", "OFF "])
def test_a_memo_that_is_switched_off_neither_keeps_nor_answers(memo, monkeypatch, word):
    key, _ = kept(memo)
    monkeypatch.setenv("SWEEP_MEMO", word)
    off = Memo(memo.folder)
    off.put(off.key({"q": 2}), ANSWER)
    assert off.get(key) is None
    assert off.facts().entries == 1
    assert not off.facts().enabled


def test_the_environment_says_where_a_memo_is_and_bounds_it(tmp_path, monkeypatch):
    monkeypatch.setenv("XDG_CACHE_HOME", str(tmp_path))
    monkeypatch.setenv("SWEEP_MEMO_BYTES", "1234")
    assert Memo().folder == tmp_path / "sampled-loop-atlas" / "answers"
    assert Memo().limit_bytes == 1234
    assert Memo(limit_bytes=99).limit_bytes == 99


@pytest.mark.parametrize("text", ["1 GB", "-1", "1e9", "²"])
def test_a_bound_that_is_no_number_of_bytes_is_an_error_with_a_remedy(monkeypatch, text):
    monkeypatch.setenv("SWEEP_MEMO_BYTES", text)
    with pytest.raises(InputError, match="whole number of bytes") as caught:
        Memo()
    assert "unset it" in caught.value.remedy
