"""Network file systems are recognised from the text of /proc/self/mountinfo."""

from __future__ import annotations

from pathlib import Path, PurePosixPath

import pytest

from registry.keeping import mounts
from registry.keeping.mounts import filesystem_of, network_filesystem

TABLE = r"""22 1 8:1 / / rw,relatime shared:1 - ext4 /dev/sda1 rw
30 22 0:40 / /data rw,relatime - nfs4 server:/export rw,vers=4.2
31 30 8:17 / /data/local rw - xfs /dev/sdb1 rw
32 22 0:41 / /mnt/lab\040share rw - cifs //host/lab rw
33 22 0:42 / /home/ada/remote rw,nosuid - fuse.sshfs ada@host: rw
34 22 0:43 / /scratch rw - lustre mds@tcp:/scratch rw
35 22 0:44 / /over rw - nfs old:/x rw
36 22 8:33 / /over rw - btrfs /dev/sdc rw
a line that is none
37 22 0:45 / /broken rw -
"""


@pytest.mark.parametrize(
    ("path", "kind"),
    [
        ("/", "ext4"),
        ("/database", "ext4"),
        ("/data", "nfs4"),
        ("/data/registry", "nfs4"),
        ("/data/local/registry", "xfs"),
        ("/mnt/lab share/registry", "cifs"),
        ("/home/ada/remote/x", "fuse.sshfs"),
        ("/home/ada/remoteness", "ext4"),
        ("/over/x", "btrfs"),
    ],
)
def test_the_deepest_and_last_mount_counts(path: str, kind: str) -> None:
    assert filesystem_of(PurePosixPath(path), TABLE) == kind


def test_without_any_mount_there_is_no_answer() -> None:
    assert filesystem_of(PurePosixPath("/x"), "") is None


@pytest.mark.parametrize(
    ("kind", "remote"),
    [
        ("nfs", True),
        ("nfs4", True),
        ("cifs", True),
        ("smb3", True),
        ("9p", True),
        ("lustre", True),
        ("gpfs", True),
        ("fuse.sshfs", True),
        ("ext4", False),
        ("fuseblk", False),
        ("overlay", False),
        ("nfsd", False),
        ("tmpfs", False),
    ],
)
def test_only_network_file_systems_are_named(
    kind: str, remote: bool, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    table = tmp_path / "mountinfo"
    table.write_text(f"22 1 8:1 / / rw - {kind} source rw\n")
    monkeypatch.setattr(mounts, "MOUNTINFO", table)
    assert network_filesystem(tmp_path / "not" / "there" / "yet") == (kind if remote else None)


def test_a_link_to_a_network_folder_is_followed(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    (tmp_path / "far").mkdir()
    (tmp_path / "near").symlink_to(tmp_path / "far")
    table = tmp_path / "mountinfo"
    table.write_text(
        f"1 1 8:1 / / rw - ext4 x rw\n2 1 0:9 / {(tmp_path / 'far').resolve()} rw - nfs4 server:/x rw\n"
    )
    monkeypatch.setattr(mounts, "MOUNTINFO", table)
    assert network_filesystem(tmp_path / "near" / "registry") == "nfs4"


def test_a_system_without_that_table_knows_of_none(tmp_path: Path, monkeypatch: pytest.MonkeyPatch) -> None:
    monkeypatch.setattr(mounts, "MOUNTINFO", tmp_path / "missing")
    assert network_filesystem(tmp_path) is None
