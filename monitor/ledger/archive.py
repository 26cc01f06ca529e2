"""Files by content: accepted files, rules, settings, sessions and results, under the SHA-256 of their plain bytes.

A blob lies gzip-compressed in root/ab/cdef....gz, so that anybody can read it without this program. It is written to
a temporary file in its own folder, synced, renamed, and the folder synced, so that when `put` returns it is there for
good and a half-written one is never seen. A temporary file that a crash leaves behind is ignored.
"""

from __future__ import annotations

import os
import re
import secrets
import zlib
from collections.abc import Iterable, Iterator, Sequence
from dataclasses import dataclass
from pathlib import Path

from monitor.ledger.disk import disk_errors, make_folder, sync_folder
from monitor.ledger.links import digest
from monitor.words import Damaged

SHA256 = re.compile(r"[0-9a-f]{64}")
GZIP = (
    31  # zlib's window bits for a gzip header, which it writes without a time, so that equal content gives equal bytes
)


@dataclass(frozen=True)
class Archive:
    """The folder `root`; it is made when the first blob is put. All methods take and give hashes as 64 hex digits."""

    root: Path

    def path(self, sha: str) -> Path:
        if not SHA256.fullmatch(sha):
            raise ValueError(f"{sha!r} is not a SHA-256 in lower-case hexadecimal")
        return self.root / sha[:2] / f"{sha[2:]}.gz"

    def __contains__(self, sha: str) -> bool:
        return self.path(sha).is_file()

    def put(self, data: bytes) -> str:
        """Store a blob durably and give its hash. One that is there already is not written again."""
        return self.put_many([data])[0]

    def put_many(self, blobs: Sequence[bytes]) -> list[str]:
        """Store blobs durably and give their hashes in order, syncing each folder once."""
        hashes = [digest(data) for data in blobs]
        if not hashes:
            return hashes
        with disk_errors(f"writing to the archive {self.root}"):
            for sha, data in zip(hashes, blobs, strict=True):
                path = self.path(sha)
                if not path.is_file():
                    make_folder(path.parent)
                    _write(path, zlib.compress(data, wbits=GZIP))
            # Also where nothing was written: a crash may have come between an earlier rename and its sync.
            for folder in sorted({self.path(sha).parent for sha in hashes}):
                sync_folder(folder)
            sync_folder(self.root)
        return hashes

    def get(self, sha: str) -> bytes:
        """The blob's plain bytes. Raises Damaged, naming the file, when it is missing or its content is not that."""
        path = self.path(sha)
        try:
            with disk_errors(f"reading {path}"):
                packed = path.read_bytes() if path.exists() else None
        except FileNotFoundError:
            packed = None
        if packed is None:
            raise Damaged(f"{path} is missing; it held the content with SHA-256 {sha}")
        data = _unpack(packed)
        if data is None or digest(data) != sha:
            raise Damaged(f"{path} was altered: it no longer holds the content with SHA-256 {sha}")
        return data

    def check(self, shas: Iterable[str]) -> Iterator[tuple[str, str]]:
        """For each blob that is missing or altered, its hash and what is wrong, naming the file."""
        for sha in shas:
            try:
                self.get(sha)
            except Damaged as damage:
                yield sha, str(damage)


def _write(path: Path, packed: bytes) -> None:
    temporary = path.with_name(f".{secrets.token_hex(8)}.new")
    try:
        with temporary.open("xb") as file:
            file.write(packed)
            file.flush()
            os.fsync(file.fileno())
        temporary.replace(path)
    except OSError:
        temporary.unlink(missing_ok=True)
        raise


def _unpack(packed: bytes) -> bytes | None:
    stream = zlib.decompressobj(wbits=GZIP)
    try:
        data = stream.decompress(packed)
    except zlib.error:
        return None
    return data if stream.eof and not stream.unused_data else None
