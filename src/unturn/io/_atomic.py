"""Files are written whole beside their target, read back, and only then put in its place."""

from __future__ import annotations

import contextlib
import errno
import os
import shutil
import tempfile
from collections.abc import Iterator, Sequence
from pathlib import Path

from unturn.errors import UsageError

# A folder of this name left behind by a killed run holds nothing anybody needs and may be deleted.
WORK_PREFIX = ".unturn-"


@contextlib.contextmanager
def replacing(target: Path) -> Iterator[Path]:
    """Yield a path of the target's own name in a new folder beside it; on a clean exit move all into place.

    A format may produce several files: whatever lies in the folder is moved beside the target, the target
    itself last. On any exception the folder is removed and what was there before stays.

    Raises
    ------
    UsageError
        The target is a folder, a device or a pipe, its folder is missing or may not be written to, the disk is full, or a
        file that goes beside the target would replace one of another result.
    """
    final = Path(os.path.realpath(target))
    if final.is_dir():
        raise UsageError(f"{target} is a folder; give the name of a file in it.")
    if final.exists() and not final.is_file():
        raise UsageError(
            f"{target} is a device or a pipe, which a file would take the place of; give another name."
        )
    try:
        os.fspath(final).encode()
    except UnicodeEncodeError:
        raise UsageError(
            f"{os.fspath(target)!a}: the name is not UTF-8, which the writers need; give another one."
        ) from None
    try:
        work = Path(
            tempfile.mkdtemp(prefix=f"{WORK_PREFIX}{final.stem[:40]}-", suffix=".tmp", dir=final.parent)
        )
    except OSError as error:
        raise _cannot_write(target, error) from error
    try:
        yield work / final.name
        _move_into_place(work, final)
    except BrokenPipeError:  # of the text for people, not of the file
        raise
    except OSError as error:
        raise _cannot_write(target, error) from error
    finally:
        shutil.rmtree(work, ignore_errors=True)


def ensure_room(path: Path, n_bytes: int) -> None:
    """Raise `OSError` unless so many bytes can be written beside `path`, by taking the room and giving it back.

    HDF5 ends the interpreter when the disk is full in the middle of a file.
    """
    if not hasattr(os, "posix_fallocate"):
        if shutil.disk_usage(path.parent).free < n_bytes:
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC))
        return
    with tempfile.TemporaryFile(dir=path.parent) as file:
        os.posix_fallocate(file.fileno(), 0, max(n_bytes, 1))


def _cannot_write(target: Path, error: OSError) -> UsageError:
    reason = error.strerror or str(error)
    return UsageError(
        f"{target} cannot be written: {reason}. What was there before is unchanged. "
        "Choose a folder that exists, that you may write to and that has room."
    )


def _refuse_strangers(work: Path, final: Path, produced: Sequence[Path]) -> None:
    """Refuse to replace files beside a target that is not there itself: they belong to something else."""
    for source in produced:
        place = final.parent / source.relative_to(work)
        if place.exists():
            raise UsageError(
                f"{final.name} needs the name {source.relative_to(work)} beside it, and such a file is there already, of "
                "another result. Give another output, or remove that file."
            )


def _move_into_place(work: Path, final: Path) -> None:
    """Move all files of `work` beside `final`, `final` itself last; put the old ones back if a move fails."""
    produced = sorted(p for p in work.rglob("*") if p.is_file())
    index = work / final.name
    if index not in produced:
        raise OSError("the writer produced no file")
    produced.remove(index)
    if not final.exists():
        _refuse_strangers(work, final, produced)
    kept = Path(tempfile.mkdtemp(prefix="old-", dir=work))
    moved: list[tuple[Path, Path | None]] = []
    try:
        for source in [*produced, index]:
            place = final.parent / source.relative_to(work)
            place.parent.mkdir(exist_ok=True, parents=True)
            old = None
            if place.exists():
                shutil.copymode(place, source)
                if source is not index:
                    old = kept / str(len(moved))
                    os.replace(place, old)
            moved.append((place, old))
            os.replace(source, place)
    except BaseException:
        for place, old in reversed(moved):
            if old is not None:
                os.replace(old, place)
            elif place != final:
                place.unlink(missing_ok=True)
        raise
