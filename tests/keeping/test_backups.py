"""A backup is a whole registry of its own, whatever engine the original runs on."""

from __future__ import annotations

from pathlib import Path
from typing import Any

import pytest

from registry.errors import DamageError, RegistryError
from registry.keeping.admitting import admit
from registry.keeping.auditing import audit
from registry.keeping.backups import backup
from registry.keeping.changing import withdraw
from registry.keeping.describing import add_chip
from registry.keeping.opening import open_registry


def filled(lab: Any, tmp_path: Path, trace: Any) -> None:
    state = lab.state(1, {"P1": 5e-324, "P2": -1 / 3}, settings={"field": (150, "mT")})
    files = [trace(tmp_path / f"t{i}.txt", seed=i) for i in range(3)]
    assert not admit(lab.registry, files, tuning=state, at=lab.day(2)).failed
    withdraw(lab.registry, lab.state(3), why="wrong", at=lab.day(4))


def test_a_backup_has_the_same_root_and_audits_clean(
    lab: Any, tmp_path: Path, trace: Any, digests: Any, rehashed: Any
) -> None:
    filled(lab, tmp_path, trace)
    original = audit(lab.registry)
    told: list[tuple[int, int]] = []
    out = backup(lab.registry, tmp_path / "copy", progress=lambda done, of: told.append((done, of)))
    assert told == [(1, 3), (2, 3), (3, 3)]
    with open_registry(out) as copy:
        report = audit(copy)
        assert (report.findings, report.root, report.journal) == ((), original.root, original.journal)
        assert digests(copy) == digests(lab.registry)
        assert all(stored == again for stored, again in rehashed(copy).items())
        assert add_chip(copy, "K9").new


def test_a_backup_goes_its_own_way_afterwards(lab: Any, tmp_path: Path, count: Any) -> None:
    before = count(lab.registry)
    with open_registry(backup(lab.registry, tmp_path / "copy")) as copy:
        add_chip(copy, "K9")
        assert count(copy) == before + 1
    assert count(lab.registry) == before


def test_a_backup_while_others_write_is_the_last_whole_state(
    lab: Any, tmp_path: Path, reopen: Any, count: Any
) -> None:
    before = count(lab.registry)
    with reopen() as other, lab.registry.writing():
        add_chip(lab.registry, "K9")
        out = backup(other, tmp_path / "copy")
    with open_registry(out) as copy:
        assert count(copy) == before
        assert audit(copy).findings == ()


def test_a_place_that_is_not_empty_is_refused(lab_here: Any, tmp_path: Path) -> None:
    (tmp_path / "copy").mkdir()
    (tmp_path / "copy" / "x").write_text("x")
    with pytest.raises(RegistryError, match="not empty"):
        backup(lab_here.registry, tmp_path / "copy")
    with pytest.raises(RegistryError):
        backup(lab_here.registry, tmp_path / "copy" / "x")


def test_a_damaged_file_is_not_copied_in_silence(lab_here: Any, tmp_path: Path, trace: Any) -> None:
    filled(lab_here, tmp_path, trace)
    stored = lab_here.registry.files.open_path(next(iter(lab_here.registry.files)))
    stored.chmod(0o644)
    stored.write_bytes(b"x" * stored.stat().st_size)
    with pytest.raises(DamageError):
        backup(lab_here.registry, tmp_path / "copy")
