"""The archive: complete under the digest, or not there; nothing wanted is ever swept."""

import hashlib
import os
import subprocess
import sys
import threading
from pathlib import Path

import pytest

from service.errors import NotFound
from service.tiles.archive import Archive

TIFF = b"II*\x00" + b"pixels" * 100
HOUR = 3600.0


def digest_of(content: bytes) -> str:
    return hashlib.sha256(content).hexdigest()


def put(archive: Archive, content: bytes) -> Path:
    with archive.incoming() as path:
        path.write_bytes(content)
        return archive.keep(path, digest_of(content))


def make_older(path: Path, *, seconds: float) -> None:
    then = path.stat().st_mtime - seconds
    os.utime(path, (then, then))


@pytest.mark.parametrize(
    ("content", "suffix"),
    [(TIFF, ".tif"), (b"\xff\x4f\xff\x51 and more", ".jp2"), (b"other", ".bin"), (b"", ".bin")],
)
def test_a_kept_file_is_found_by_its_digest(tmp_path: Path, content: bytes, suffix: str) -> None:
    archive = Archive(tmp_path)
    digest = digest_of(content)
    kept = put(archive, content)
    assert kept == tmp_path / "archive" / digest[:2] / f"{digest}{suffix}"
    assert Archive(tmp_path).path_of(digest) == kept
    assert kept.read_bytes() == content
    assert list((tmp_path / "incoming").iterdir()) == []


def test_an_upload_that_is_not_kept_leaves_nothing(tmp_path: Path) -> None:
    archive = Archive(tmp_path)
    with archive.incoming() as first, archive.incoming() as second:
        assert first != second
        assert first.stat().st_mode & 0o077 == 0
        first.write_bytes(TIFF)
    assert list((tmp_path / "incoming").iterdir()) == []
    assert archive.bytes_used() == 0


def test_an_upload_that_breaks_off_leaves_nothing(tmp_path: Path) -> None:
    archive = Archive(tmp_path)

    def break_off() -> None:
        with archive.incoming() as path:
            path.write_bytes(b"half")
            raise ConnectionError

    with pytest.raises(ConnectionError):
        break_off()
    assert list((tmp_path / "incoming").iterdir()) == []


def test_content_that_is_there_already_stays_and_counts_as_new(tmp_path: Path) -> None:
    archive = Archive(tmp_path)
    kept = put(archive, TIFF)
    inode = kept.stat().st_ino
    make_older(kept, seconds=HOUR)
    old = kept.stat().st_mtime
    assert put(archive, TIFF) == kept
    assert kept.stat().st_ino == inode
    assert kept.stat().st_mtime > old + HOUR / 2
    assert archive.bytes_used() == len(TIFF)


def test_a_kept_file_that_lost_its_end_is_replaced(tmp_path: Path) -> None:
    archive = Archive(tmp_path)
    put(archive, TIFF).write_bytes(TIFF[:10])
    assert put(archive, TIFF).read_bytes() == TIFF


def test_an_unknown_digest_is_not_found(tmp_path: Path) -> None:
    with pytest.raises(NotFound) as caught:
        Archive(tmp_path).path_of(digest_of(b"never seen"))
    assert str(tmp_path) not in caught.value.detail


@pytest.mark.parametrize("digest", ["", "../../etc/passwd", "A" * 64, "a" * 63, "a" * 64 + "\n"])
def test_what_is_not_a_digest_never_becomes_a_path(tmp_path: Path, digest: str) -> None:
    archive = Archive(tmp_path)
    with pytest.raises(ValueError, match="64"):
        archive.path_of(digest)
    with archive.incoming() as path, pytest.raises(ValueError, match="64"):
        archive.keep(path, digest)


def test_only_old_orphans_are_swept(tmp_path: Path) -> None:
    archive = Archive(tmp_path)
    contents = {name: TIFF + name.encode() for name in ("old orphan", "new orphan", "old wanted")}
    paths = {name: put(archive, content) for name, content in contents.items()}
    make_older(paths["old orphan"], seconds=2 * HOUR)
    make_older(paths["old wanted"], seconds=2 * HOUR)
    wanted = {digest_of(contents["old wanted"])}
    assert archive.remove_orphans(wanted, older_than_seconds=HOUR) == 1
    assert {name for name, path in paths.items() if path.exists()} == {"new orphan", "old wanted"}
    assert archive.remove_orphans(wanted.__contains__, older_than_seconds=HOUR) == 0


def test_an_orphan_sent_again_while_the_sweep_looks_is_spared(tmp_path: Path) -> None:
    archive = Archive(tmp_path)
    kept = put(archive, TIFF)
    make_older(kept, seconds=2 * HOUR)

    def wanted(digest: str) -> bool:
        assert digest == digest_of(TIFF)
        put(archive, TIFF)
        return False

    assert archive.remove_orphans(wanted, older_than_seconds=HOUR) == 0
    assert kept.read_bytes() == TIFF


def test_a_file_that_is_not_ours_is_left_alone(tmp_path: Path) -> None:
    archive = Archive(tmp_path)
    note = tmp_path / "archive" / "ab" / "note.txt"
    note.parent.mkdir()
    note.write_text("by hand", encoding="ascii")
    make_older(note, seconds=2 * HOUR)
    assert archive.remove_orphans(set(), older_than_seconds=HOUR) == 0
    assert note.exists()


def test_a_process_killed_while_it_writes_leaves_only_an_incoming_file(tmp_path: Path) -> None:
    killed_in_mid_write = (
        "import os, signal, sys\nfrom pathlib import Path\n"
        "from service.tiles.archive import Archive\n"
        "with Archive(Path(sys.argv[1])).incoming() as path:\n"
        "    path.write_bytes(b'half of it')\n"
        "    os.kill(os.getpid(), signal.SIGKILL)\n"
    )
    done = subprocess.run([sys.executable, "-c", killed_in_mid_write, str(tmp_path)], check=False)
    assert done.returncode == -9
    archive = Archive(tmp_path)
    assert [path.read_bytes() for path in (tmp_path / "incoming").iterdir()] == [b"half of it"]
    assert archive.remove_orphans(set(), older_than_seconds=-HOUR) == 0
    assert archive.clear_incoming(older_than_seconds=HOUR) == 0
    assert archive.clear_incoming() == 1
    assert archive.bytes_used() == 0


def test_a_process_killed_after_keeping_leaves_the_whole_file(tmp_path: Path) -> None:
    killed_after = (
        "import os, signal, sys\nfrom pathlib import Path\n"
        "from service.tiles.archive import Archive\n"
        "archive = Archive(Path(sys.argv[1]))\n"
        "with archive.incoming() as path:\n"
        "    path.write_bytes(bytes.fromhex(sys.argv[2]))\n"
        "    archive.keep(path, sys.argv[3])\n"
        "    os.kill(os.getpid(), signal.SIGKILL)\n"
    )
    arguments = [str(tmp_path), TIFF.hex(), digest_of(TIFF)]
    done = subprocess.run([sys.executable, "-c", killed_after, *arguments], check=False)
    assert done.returncode == -9
    archive = Archive(tmp_path)
    assert archive.path_of(digest_of(TIFF)).read_bytes() == TIFF
    assert archive.clear_incoming() == 0
    # No lock is left behind by the dead process.
    assert put(archive, TIFF).exists()


def test_many_threads_may_keep_the_same_content(tmp_path: Path) -> None:
    archive = Archive(tmp_path)
    kept: list[Path] = []
    threads = [threading.Thread(target=lambda: kept.append(put(archive, TIFF))) for _ in range(16)]
    for thread in threads:
        thread.start()
    for thread in threads:
        thread.join()
    assert len(kept) == 16
    assert set(kept) == {archive.path_of(digest_of(TIFF))}
    assert archive.bytes_used() == len(TIFF)


def test_space_is_counted_with_what_is_still_coming_in(tmp_path: Path) -> None:
    archive = Archive(tmp_path)
    put(archive, TIFF)
    with archive.incoming() as path:
        path.write_bytes(b"123")
        assert archive.bytes_used() == len(TIFF) + 3
    assert archive.free_bytes() > 0
