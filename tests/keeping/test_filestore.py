"""A file in the store is whole, durable and read-only, whatever goes wrong on the way."""

from __future__ import annotations

import errno
import multiprocessing
import os
import random
import stat
from collections.abc import Iterator
from hashlib import sha256
from pathlib import Path

import pytest

from registry.errors import DamageError, InputError, MillikeepError, RegistryError
from registry.keeping.disk import Disk
from registry.keeping.filestore import FileStore, Stored
from registry.keeping.incoming import Incoming
from registry.keeping.intake import READ_BYTES

DATA = random.Random(4).randbytes(READ_BYTES + 5_000)
NAME = sha256(DATA).hexdigest()
SMALL = DATA[:900]
SMALL_NAME = sha256(SMALL).hexdigest()
STEPS = (
    *("open_read", "open_new", "stat", "stat_path", "read_into", "write", "make_read_only"),
    *("sync", "close", "make_folder", "move", "remove", "sync_folder"),
)


class FaultyDisk(Disk):
    """A disk that fails at its ``at``-th call, and notes the names of all calls."""

    def __init__(self, at: int | None = None, code: int = errno.EIO, *, lasting: bool = False) -> None:
        self.calls: list[str] = []
        self._at, self._code, self._lasting = at, code, lasting

    def __getattribute__(self, name: str) -> object:
        method = super().__getattribute__(name)
        if name not in STEPS:
            return method
        calls: list[str] = self.calls
        calls.append(name)
        if self._at is not None and (len(calls) == self._at or (self._lasting and len(calls) > self._at)):
            raise OSError(self._code, os.strerror(self._code))
        return method


@pytest.fixture
def source(tmp_path: Path) -> Path:
    path = tmp_path / "trace.dat"
    path.write_bytes(DATA)
    return path


@pytest.fixture
def small(tmp_path: Path) -> Path:
    """A source for the many runs of the fault tests."""
    path = tmp_path / "small.dat"
    path.write_bytes(SMALL)
    return path


@pytest.fixture
def store(tmp_path: Path) -> Iterator[FileStore]:
    opened = FileStore(tmp_path / "files")
    yield opened
    opened.close()


def leftovers(store: FileStore) -> list[Path]:
    return [path for path in (store.root / "incoming").rglob("*") if path.is_file()]


def damage(path: Path, data: bytes) -> None:
    path.chmod(0o644)
    path.write_bytes(data)


def test_a_kept_file_lies_under_its_digest_read_only(store: FileStore, source: Path) -> None:
    stored = store.put(source)
    assert stored == Stored(NAME, len(DATA), store.root / NAME[:2] / NAME[2:])
    assert stored.path.read_bytes() == DATA
    assert stat.S_IMODE(stored.path.stat().st_mode) == 0o444
    assert store.open_path(NAME) == stored.path
    assert store.verify(NAME) == len(DATA)
    assert list(store) == [NAME]
    assert not leftovers(store)


def test_the_original_is_not_touched(store: FileStore, source: Path) -> None:
    before = source.stat()
    store.put(source)
    after = source.stat()
    assert source.read_bytes() == DATA
    assert (after.st_mtime_ns, after.st_mode, after.st_ino) == (
        before.st_mtime_ns,
        before.st_mode,
        before.st_ino,
    )


@pytest.mark.parametrize("size", [0, 1, READ_BYTES - 1, READ_BYTES, READ_BYTES + 1])
def test_any_size_is_kept_whole(store: FileStore, tmp_path: Path, size: int) -> None:
    data = DATA[:size]
    (tmp_path / "one").write_bytes(data)
    assert store.put(tmp_path / "one").path.read_bytes() == data
    assert store.put_bytes(data).sha256 == sha256(data).hexdigest()


def test_the_file_is_synced_before_its_name_and_the_folders_after(tmp_path: Path, source: Path) -> None:
    disk = FaultyDisk()
    FileStore(tmp_path / "files", disk=disk).put(source)
    order = [call for call in disk.calls if call in ("write", "sync", "move", "sync_folder")]
    # First the folder that the new store itself lies in, last `ab/` and the store.
    assert order == ["sync_folder", "write", "write", "sync", "move", "sync_folder", "sync_folder"]


def test_the_same_file_again_is_one_copy_and_syncs_its_folders(tmp_path: Path, source: Path) -> None:
    FileStore(tmp_path / "files").put(source)
    disk = FaultyDisk()
    store = FileStore(tmp_path / "files", disk=disk)
    assert store.put(source).note is None
    assert "move" not in disk.calls
    assert disk.calls[-2:] == ["sync_folder", "sync_folder"]
    assert list(store) == [NAME]
    assert not leftovers(store)


@pytest.mark.parametrize("harm", [DATA[:-1], DATA[:100] + b"?" + DATA[101:], b"", DATA + b"!"])
def test_a_damaged_older_copy_is_replaced_and_said(store: FileStore, source: Path, harm: bytes) -> None:
    damage(store.put(source).path, harm)
    again = store.put(source)
    assert again.note is not None
    assert "damaged" in again.note
    assert store.verify(NAME) == len(DATA)


def test_many_files_come_back_in_order_each_for_itself(store: FileStore, tmp_path: Path) -> None:
    paths = [tmp_path / f"{number}.txt" for number in range(60)]
    for number, path in enumerate(paths):
        path.write_text(f"contents {number % 50}")
    missing = tmp_path / "missing"
    outcomes = store.put_many([*paths[:30], missing, tmp_path, *paths[30:]])
    assert isinstance(outcomes[30], InputError)
    assert isinstance(outcomes[31], InputError)
    kept = outcomes[:30] + outcomes[32:]
    digests = [sha256(path.read_bytes()).hexdigest() for path in paths]
    assert [each.sha256 for each in kept if isinstance(each, Stored)] == digests
    assert list(store) == sorted(set(digests))
    assert not leftovers(store)


def test_no_files_are_no_work(store: FileStore) -> None:
    assert store.put_many([]) == []
    assert list(store) == []


def test_many_files_sync_each_changed_folder_once(tmp_path: Path) -> None:
    paths = [tmp_path / f"{number}.txt" for number in range(300)]
    for number, path in enumerate(paths):
        path.write_text(f"contents {number}")
    disk = FaultyDisk()
    store = FileStore(tmp_path / "files", disk=disk)
    store.put_many(paths)
    folders = {name[:2] for name in store}
    assert disk.calls.count("sync_folder") == 1 + len(folders) + 1
    assert disk.calls.count("sync") == 300


@pytest.mark.parametrize("kind", ["missing", "folder", "pipe", "circle"])
def test_what_is_no_file_is_refused_at_once(store: FileStore, tmp_path: Path, kind: str) -> None:
    path = tmp_path / kind
    if kind == "folder":
        path.mkdir()
    elif kind == "pipe":
        os.mkfifo(path)
    elif kind == "circle":
        path.symlink_to(path)
    with pytest.raises(InputError) as caught:
        store.put(path)
    assert caught.value.where == str(path)
    assert caught.value.remedy


class WritingDisk(Disk):
    """A disk on which another program changes the source while it is read."""

    def __init__(self, change: object) -> None:
        self._change = change

    def read_into(self, handle: int, buffer: memoryview) -> int:
        count = super().read_into(handle, buffer)
        if callable(self._change) and not count:
            self._change()
        return count


@pytest.mark.parametrize("change", ["grown", "touched", "replaced", "removed"])
def test_a_source_that_changes_while_copied_is_refused(tmp_path: Path, source: Path, change: str) -> None:
    def grown() -> None:
        with source.open("ab") as file:
            file.write(b"more")

    def replaced() -> None:
        other = tmp_path / "other"
        other.write_bytes(DATA)
        os.utime(other, ns=(source.stat().st_atime_ns, source.stat().st_mtime_ns))
        other.replace(source)

    changes = {
        "grown": grown,
        "touched": lambda: os.utime(source, (0, 0)),
        "replaced": replaced,
        "removed": source.unlink,
    }
    store = FileStore(tmp_path / "files", disk=WritingDisk(changes[change]))
    with pytest.raises(InputError):
        store.put(source)
    assert list(store) == []
    assert not leftovers(store)


def test_a_source_locked_for_writing_is_refused(store: FileStore, source: Path) -> None:
    fcntl = pytest.importorskip("fcntl")
    with source.open("r+b") as writer:
        fcntl.flock(writer, fcntl.LOCK_EX)
        with pytest.raises(InputError, match="locked for writing"):
            store.put(source)


def test_a_missing_file_is_damage_with_a_remedy(store: FileStore, source: Path) -> None:
    path = store.put(source).path
    path.unlink()
    with pytest.raises(DamageError, match="is missing") as caught:
        store.open_path(NAME)
    assert str(path) in caught.value.where


def test_every_flipped_byte_of_a_stored_file_is_found(store: FileStore) -> None:
    data = bytes(range(60))
    path = store.put_bytes(data).path
    for place in range(len(data)):
        damage(path, data[:place] + bytes([data[place] ^ 0x10]) + data[place + 1 :])
        with pytest.raises(DamageError, match="has changed"):
            store.verify(path.parent.name + path.name)


@pytest.mark.parametrize("name", ["", "../../etc/passwd", NAME.upper(), NAME + "0", "/" * 64])
def test_a_name_that_is_no_digest_never_becomes_a_path(store: FileStore, name: str) -> None:
    with pytest.raises(DamageError, match="no SHA-256"):
        store.open_path(name)


def test_strange_names_in_the_store_are_told_and_passed_over(store: FileStore, source: Path) -> None:
    folder = store.put(source).path.parent
    (folder / "notes.txt").write_text("mine")
    (folder / ("0" * 62)).mkdir()
    (store.root / "head").write_text("a witness")
    assert set(store.strays()) == {folder / "notes.txt", folder / ("0" * 62)}


# --- faults ---


def calls_of(tmp_path: Path, small: Path, case: str) -> list[str]:
    disk = FaultyDisk()
    run(prepared(tmp_path / "counted", small, case, disk), small)
    return disk.calls


def prepared(root: Path, small: Path, case: str, disk: Disk) -> FileStore:
    """A store that is new, or holds the file already, or holds a damaged copy of it."""
    if case != "new":
        first = FileStore(root)
        stored = first.put(small)
        first.close()
        if case == "damaged":
            damage(stored.path, b"x" * len(SMALL))
    return FileStore(root, disk=disk)


def run(store: FileStore, small: Path) -> Stored | MillikeepError:
    try:
        return store.put(small)
    except MillikeepError as error:
        return error


@pytest.mark.parametrize("code", [errno.ENOSPC, errno.EIO, errno.EROFS])
@pytest.mark.parametrize("lasting", [False, True], ids=["once", "lasting"])
@pytest.mark.parametrize("case", ["new", "again", "damaged"])
def test_a_fault_at_any_call_leaves_nothing_half_done(
    tmp_path: Path, small: Path, case: str, lasting: bool, code: int
) -> None:
    total = len(calls_of(tmp_path, small, case))
    assert total > 15
    refused = 0
    for at in range(1, total + 1):
        store = prepared(tmp_path / f"at{at}", small, case, FaultyDisk(at, code, lasting=lasting))
        outcome = run(store, small)
        store.close()
        whole = FileStore(store.root)
        if isinstance(outcome, Stored):
            assert whole.verify(SMALL_NAME) == len(SMALL)
        else:
            refused += 1
            assert outcome.remedy
            assert isinstance(outcome, RegistryError | InputError)
        assert set(whole) <= {SMALL_NAME}
        if case != "damaged":
            assert all(whole.verify(name) for name in whole)
        assert whole.put(small).path.read_bytes() == SMALL
        assert not [path for path in leftovers(whole) if not path.is_dir()]
        whole.close()
    assert refused >= total // 2


def test_a_fault_in_a_batch_hits_one_file_and_spares_the_rest(tmp_path: Path) -> None:
    paths = [tmp_path / f"{number}.txt" for number in range(12)]
    for number, path in enumerate(paths):
        path.write_text(f"contents {number}")
    counting = FaultyDisk()
    FileStore(tmp_path / "counted", disk=counting).put_many(paths, threads=1)
    for at in range(1, len(counting.calls) + 1, 4):
        disk = FaultyDisk(at, errno.ENOSPC)
        store = FileStore(tmp_path / f"at{at}", disk=disk)
        outcomes = store.put_many(paths, threads=1)
        store.close()
        kept = [outcome for outcome in outcomes if isinstance(outcome, Stored)]
        assert all(FileStore(store.root).verify(each.sha256) == each.size for each in kept)
        # A folder that cannot be synced holds several files, the store's own folder all of them.
        assert len(kept) >= 11 or disk.calls[at - 1] == "sync_folder"


@pytest.mark.parametrize(
    ("code", "words"),
    [
        (errno.ENOSPC, "disk is full"),
        (errno.EIO, "fault"),
        (errno.EROFS, "read-only"),
        (errno.EDQUOT, "quota"),
        (errno.EACCES, "permission"),
    ],
)
def test_a_refusing_disk_is_named_with_a_remedy(tmp_path: Path, small: Path, code: int, words: str) -> None:
    at = calls_of(tmp_path, small, "new").index("write") + 1
    store = FileStore(tmp_path / "files", disk=FaultyDisk(at, code))
    with pytest.raises(RegistryError, match=words) as caught:
        store.put(small)
    assert str(store.root) in caught.value.where
    assert caught.value.remedy


def test_after_a_failed_folder_sync_the_file_is_written_anew(tmp_path: Path, small: Path) -> None:
    at = len(calls_of(tmp_path, small, "new"))
    disk = FaultyDisk(at)
    store = FileStore(tmp_path / "files", disk=disk)
    with pytest.raises(RegistryError):
        store.put(small)
    assert disk.calls[-1] == "sync_folder"
    before = len(disk.calls)
    store.put(small)
    assert disk.calls[before:].count("move") == 1


# --- what interrupted programs leave ---


def die_while_copying(root: Path) -> None:
    """Runs in another process: begins a file and is gone."""
    path, _ = Incoming(root, Disk()).new()
    path.write_bytes(b"half")
    os._exit(9)


def test_what_a_killed_program_left_is_swept_at_the_next_start(tmp_path: Path, source: Path) -> None:
    root = tmp_path / "files"
    process = multiprocessing.get_context("spawn").Process(target=die_while_copying, args=(root,))
    process.start()
    process.join()
    store = FileStore(root)
    assert len(leftovers(store)) == 1
    store.put(source)
    assert not leftovers(store)
    store.close()


def test_a_program_at_work_is_not_swept(tmp_path: Path) -> None:
    working, other = Incoming(tmp_path / "files", Disk()), FileStore(tmp_path / "files")
    path, handle = working.new()
    assert other.sweep() == 0
    other.put_bytes(b"beside it")
    assert path.exists()
    os.close(handle)
    working.close()
    other.close()
    assert not list((tmp_path / "files" / "incoming").iterdir())


def test_opening_a_store_to_read_makes_nothing(tmp_path: Path) -> None:
    store = FileStore(tmp_path / "files")
    assert list(store) == []
    assert list(store.strays()) == []
    store.sweep()
    store.close()
    assert not store.root.exists()
