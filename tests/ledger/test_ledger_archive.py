"""The archive of files by content."""

from __future__ import annotations

import errno
import gzip
import os
from hashlib import sha256
from pathlib import Path

import pytest

from monitor.ledger.archive import Archive
from monitor.words import Damaged, DuskcheckError

# FIPS 180-2, appendix B.1: the SHA-256 of "abc".
ABC = "ba7816bf8f01cfea414140de5dae2223b00361a396177a9cb410ff61f20015ad"


@pytest.fixture
def archive(tmp_path: Path) -> Archive:
    return Archive(tmp_path / "state" / "archive")


def test_a_blob_lies_under_the_sha_256_of_its_plain_bytes_and_comes_back(archive):
    assert archive.put(b"abc") == ABC

    assert archive.path(ABC) == archive.root / "ba" / f"{ABC[2:]}.gz"
    assert gzip.decompress(archive.path(ABC).read_bytes()) == b"abc"
    assert archive.get(ABC) == b"abc"
    assert ABC in archive
    assert "0" * 64 not in archive


@pytest.mark.parametrize("data", [b"", b"\0", b"x" * 1_000_000])
def test_any_content_comes_back(archive, data):
    assert archive.get(archive.put(data)) == data


def test_equal_content_gives_equal_files(archive, tmp_path):
    other = Archive(tmp_path / "other")
    sha = archive.put(b"prices" * 1000)
    other.put(b"prices" * 1000)

    assert archive.path(sha).read_bytes() == other.path(sha).read_bytes()
    assert archive.path(sha).read_bytes()[4:8] == b"\0\0\0\0"  # RFC 1952: no time


def test_a_blob_that_is_there_is_not_written_again(archive):
    sha = archive.put(b"abc")
    before = archive.path(sha).stat()

    archive.put(b"abc")

    after = archive.path(sha).stat()
    assert (after.st_ino, after.st_mtime_ns) == (before.st_ino, before.st_mtime_ns)


def test_many_are_put_in_order_and_each_folder_is_synced_once(archive, monkeypatch):
    blobs = [str(number).encode() for number in range(300)]
    synced = []

    def fsync(descriptor: int, real=os.fsync) -> None:
        synced.append(Path(f"/proc/self/fd/{descriptor}").readlink())
        real(descriptor)

    for sha in {sha256(data).hexdigest()[:2] for data in blobs}:
        (archive.root / sha).mkdir(parents=True)
    monkeypatch.setattr(os, "fsync", fsync)

    hashes = archive.put_many(blobs)

    assert hashes == [sha256(data).hexdigest() for data in blobs]
    folders = [path for path in synced if path.is_dir()]
    assert sorted(folders) == sorted({archive.path(sha).parent for sha in hashes} | {archive.root})
    assert len(synced) - len(folders) == 300
    assert archive.put_many([]) == []


def test_the_file_is_synced_before_it_gets_its_name_and_the_folder_after(archive, monkeypatch):
    steps = []

    def fsync(descriptor: int, real=os.fsync) -> None:
        steps.append(("sync", Path(f"/proc/self/fd/{descriptor}").readlink().name))
        real(descriptor)

    def replace(self: Path, target: Path, real=Path.replace) -> Path:
        steps.append(("rename", target.name))
        return real(self, target)

    monkeypatch.setattr(os, "fsync", fsync)
    monkeypatch.setattr(Path, "replace", replace)

    archive.put(b"abc")

    (temporary,) = (place for place, (_, name) in enumerate(steps) if name.endswith(".new"))
    renamed = steps.index(("rename", f"{ABC[2:]}.gz"))
    assert temporary < renamed
    assert steps[renamed + 1 :] == [("sync", "ba"), ("sync", "archive")]
    assert ("sync", "archive") in steps[:temporary]  # the new folder ba
    assert ("sync", "state") in steps[:temporary]


@pytest.mark.parametrize("sha", ["", "abc", "../../etc/passwd", ABC.upper(), ABC + "0"])
def test_what_is_no_hash_is_a_defect(archive, sha):
    with pytest.raises(ValueError, match="not a SHA-256"):
        archive.get(sha)


def test_a_missing_blob_is_damage_that_names_the_file_and_the_hash(archive):
    with pytest.raises(Damaged, match=f"{archive.path(ABC)} is missing.*{ABC}"):
        archive.get(ABC)


def test_any_flipped_byte_is_found_or_leaves_the_content_whole(archive):
    """A few bits of a gzip file (its header's flags and spare bits) say nothing about the content."""
    data = b"date,instrument,close\n2026-03-02,KELP,101.25\n" * 20
    sha = archive.put(data)
    packed = archive.path(sha).read_bytes()
    found = 0
    for place in range(len(packed)):
        archive.path(sha).write_bytes(packed[:place] + bytes([packed[place] ^ 0xFF]) + packed[place + 1 :])
        try:
            assert archive.get(sha) == data
        except Damaged as damage:
            assert str(archive.path(sha)) in str(damage)
            assert sha in str(damage)
            found += 1

    assert found > len(packed) - 10


@pytest.mark.parametrize("change", [lambda packed: packed[:-1], lambda packed: packed + b"\0", lambda _: b""])
def test_a_cut_or_longer_file_is_found(archive, change):
    sha = archive.put(b"abc")
    archive.path(sha).write_bytes(change(archive.path(sha).read_bytes()))

    with pytest.raises(Damaged, match="was altered"):
        archive.get(sha)


def test_check_names_what_is_altered_or_missing(archive):
    hashes = archive.put_many([b"one", b"two", b"three"])
    assert list(archive.check(hashes)) == []
    archive.path(hashes[1]).write_bytes(archive.path(hashes[0]).read_bytes())

    assert [sha for sha, _ in archive.check([*hashes, ABC])] == [hashes[1], ABC]


def test_a_full_disk_is_told_and_leaves_nothing(archive, monkeypatch):
    archive.put(b"one")

    def full(descriptor: int, real=os.fsync) -> None:
        if Path(f"/proc/self/fd/{descriptor}").readlink().is_file():
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        real(descriptor)

    with monkeypatch.context() as patched:
        patched.setattr(os, "fsync", full)
        with pytest.raises(DuskcheckError, match=r"writing to the archive .* failed: No space left.*free space"):
            archive.put(b"abc")

    assert ABC not in archive
    assert len([path for path in archive.root.rglob("*") if path.is_file()]) == 1
    archive.put(b"abc")
    assert archive.get(ABC) == b"abc"
