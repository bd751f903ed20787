"""The folder that holds the results: written beside, put in place whole.

At any moment, whatever happens, the folder that was asked for is absent, whole
and old, or whole and new. What a killed run leaves is one hidden folder beside
it, which the next run for the same folder removes.
"""

from __future__ import annotations

import ctypes
import errno
import hashlib
import os
import platform
import re
import secrets
import shutil
import sys
from collections.abc import Collection, Iterator
from contextlib import contextmanager, suppress
from pathlib import Path

from geoclust.errors import OutputError
from geoclust.layers.styles import STYLE_FILES

RESULT_FILES = ("results.gpkg", "centre_intensity.tif", "curves.csv", "fit.json", "report.html")
"""Files of a results folder, beside the styles that `geoclust.layers.styles` names."""

# What GIS programs and GDAL put beside a file that they open.
_COMPANIONS = (".aux.xml", ".ovr", "-wal", "-shm", "-journal")
_DISK_FULL = {errno.ENOSPC, errno.EDQUOT, errno.EFBIG, errno.EROFS}
_AT_FDCWD = -100
_RENAME_EXCHANGE = 2


@contextmanager
def results_folder(
    out: str | Path, overwrite: bool = False, *, known_files: Collection[str] = ()
) -> Iterator[Path]:
    """Give a folder to write into, which becomes `out` when the block ends well.

    Parameters
    ----------
    out
        Folder that will hold the results. The folder that it lies in must exist.
    overwrite
        Whether earlier results in `out` may be replaced. Only files that geoclust
        writes are ever replaced: a folder that holds anything else is refused.
    known_files
        Names of further files that the caller writes, beside `RESULT_FILES` and styles.

    Yields
    ------
    Path
        A new hidden folder beside `out`. On any exception, an interrupt from the
        keyboard included, it is removed and `out` stays as it was.

    Raises
    ------
    OutputError
        If `out` cannot be written or holds something that must not be replaced.
    """
    target = _target(out)
    known = {*RESULT_FILES, *STYLE_FILES, *known_files}
    _tidy_up(target)
    _check(target, out, overwrite, known)
    with _beside(target, out) as partial:
        yield partial
        _flush(partial)
        # again: somebody may have put something there in the meantime
        _check(target, out, overwrite, known)
        try:
            _put_in_place(partial, target)
        except OSError as error:
            raise OutputError(f"{out} cannot be put in place: {error.strerror}; nothing was kept.") from error
        _flush_folder(target.parent)


@contextmanager
def results_file(out: str | Path, overwrite: bool = False) -> Iterator[Path]:
    """Give a file name to write to, which becomes `out` when the block ends well.

    Parameters
    ----------
    out
        File that will hold the result. The folder that it lies in must exist.
    overwrite
        Whether a file that is there already may be replaced.

    Yields
    ------
    Path
        The same name in a new hidden folder beside `out`. On any exception, an
        interrupt included, that folder is removed and `out` stays as it was.

    Raises
    ------
    OutputError
        If `out` cannot be written, exists already, or is a folder.
    """
    target = _target(out)
    _tidy_up(target)
    _check_file(target, out, overwrite)
    with _beside(target, out) as partial:
        yield partial / target.name
        _flush(partial)
        _check_file(target, out, overwrite)
        (partial / target.name).replace(target)
        _flush_folder(target.parent)


@contextmanager
def _beside(target: Path, out: str | Path) -> Iterator[Path]:
    """Make a hidden folder beside the target, removed in the end; a full disk is said in a sentence."""
    partial = target.with_name(_hidden_name(target, "partial"))
    try:
        try:
            partial.mkdir()
        except OSError as error:
            raise OutputError(
                f"No folder can be made in {target.parent}: {error.strerror}; choose another place for {out}."
            ) from error
        try:
            yield partial
        except OSError as error:
            if error.errno not in _DISK_FULL:
                raise
            raise OutputError(f"{out} cannot be written: {error.strerror}; nothing was kept.") from error
    finally:
        # not there any more after success, unless it holds the old results by now
        shutil.rmtree(partial, ignore_errors=True)


def _check_file(target: Path, out: str | Path, overwrite: bool) -> None:
    """Refuse to replace a file unasked, or one that is open elsewhere."""
    if target.is_dir():
        raise OutputError(f"{out} is a folder, not a file; choose another name.")
    if os.path.lexists(target) and not overwrite:
        raise OutputError(f"{out} exists already; choose another name, or pass overwrite.")
    # the log of the old database would be taken for the new one's
    if target.with_name(target.name + "-wal").exists() or target.with_name(target.name + "-journal").exists():
        raise OutputError(f"{out} is in use by another program; close it there, or choose another name.")


def _target(out: str | Path) -> Path:
    """Say where `out` is, following links, and refuse places where no folder can be made."""
    try:
        target = Path(out).resolve()
        working = Path.cwd()
    except (OSError, RuntimeError, ValueError) as error:  # a loop of links, a null character
        raise OutputError(f"{out!r} is no usable name for a folder ({error}); choose another one.") from error
    if target in (working, *working.parents):
        raise OutputError(
            f"{out} is the folder you are working in, or one above it; choose one that can be made anew."
        )
    if not target.parent.is_dir():
        raise OutputError(f"There is no folder {target.parent} to put {target.name} in; make it first.")
    if not os.access(target.parent, os.W_OK | os.X_OK):
        raise OutputError(f"The folder {target.parent} cannot be written to; choose another place for {out}.")
    return target


def _check(target: Path, out: str | Path, overwrite: bool, known: Collection[str]) -> None:
    """Refuse to replace anything that was not asked for, or is not geoclust's."""
    if not os.path.lexists(target):
        return
    if not target.is_dir():
        raise OutputError(f"{out} is a file, not a folder; choose another name.")
    try:
        held = sorted(entry.name for entry in os.scandir(target))
    except OSError as error:
        raise OutputError(f"{out} cannot be looked into: {error.strerror}; choose another folder.") from error
    if not held:
        return
    if not overwrite:
        raise OutputError(f"{out} holds files already; choose another folder, or pass overwrite.")
    strange = [name for name in held if not _is_known(name, known) or not (target / name).is_file()]
    if strange:
        raise OutputError(
            f"{out} holds {strange[0]}, which is not geoclust's and would be lost; choose another folder."
        )
    if not any(name in known and name != "report.html" for name in held):  # a page alone could be anybody's
        raise OutputError(f"{out} does not look like a results folder of geoclust; choose another folder.")


def _is_known(name: str, known: Collection[str]) -> bool:
    """Whether a file is one of geoclust's, or a companion that a GIS put beside one."""
    for companion in _COMPANIONS:
        if name.endswith(companion) and name.removesuffix(companion) in known:
            return True
    return name in known


def _hidden_name(target: Path, what: str) -> str:
    """Name beside the target that says which run, on which machine, it belongs to."""
    return f".{target.name}.{what}-{os.getpid()}-{_machine()}{secrets.token_hex(4)}"


def _machine() -> str:
    """Four letters for this machine: a process number means nothing on another one."""
    return hashlib.sha256(platform.node().encode()).hexdigest()[:4]


def _tidy_up(target: Path) -> None:
    """Remove what killed runs left beside the target, and bring back what one had moved aside."""
    pattern = re.compile(rf"\.{re.escape(target.name)}\.(partial|replaced)-(\d+)-{_machine()}[0-9a-f]{{8}}")
    for entry in list(target.parent.iterdir()):
        match = pattern.fullmatch(entry.name)
        if match is None or _is_running(int(match[2])):
            continue
        if match[1] == "replaced" and not target.exists():
            with suppress(OSError):
                entry.rename(target)
        else:
            shutil.rmtree(entry, ignore_errors=True)


def _is_running(process: int) -> bool:
    """Whether a process of this machine is alive; always true where that cannot be asked safely."""
    if os.name != "posix":
        return True
    try:
        os.kill(process, 0)
    except ProcessLookupError:
        return False
    except PermissionError:
        return True
    return True


def _put_in_place(partial: Path, target: Path) -> None:
    """Rename `partial` to `target`; an earlier `target` ends up under the name `partial`, or removed."""
    if not target.exists() or not any(target.iterdir()):
        _replace_nothing(partial, target)
    elif not _exchange(partial, target):
        aside = target.with_name(_hidden_name(target, "replaced"))
        try:
            target.rename(aside)
            partial.rename(target)
        except BaseException:
            # the first rename succeeded and the second did not: the old results come back
            if aside.exists() and not target.exists():
                aside.rename(target)
            raise
        shutil.rmtree(aside, ignore_errors=True)


def _replace_nothing(partial: Path, target: Path) -> None:
    """Rename to a name that is free or an empty folder."""
    if os.name != "posix" and target.exists():
        target.rmdir()  # only POSIX renames over an empty folder
    partial.rename(target)


def _exchange(one: Path, other: Path) -> bool:
    """Exchange two names in one step of the file system; false where there is no such step."""
    if not sys.platform.startswith("linux"):
        return False
    rename = getattr(ctypes.CDLL(None, use_errno=True), "renameat2", None)
    if rename is None:
        return False
    names = (os.fsencode(one), os.fsencode(other))
    return rename(_AT_FDCWD, names[0], _AT_FDCWD, names[1], ctypes.c_uint(_RENAME_EXCHANGE)) == 0


def _flush(folder: Path) -> None:
    """Have everything below a folder written to the disk, so that a power cut loses none of it."""
    for parent, _, names in os.walk(folder):
        for name in names:
            descriptor = os.open(Path(parent, name), os.O_RDONLY)
            try:
                os.fsync(descriptor)
            finally:
                os.close(descriptor)
        _flush_folder(Path(parent))


def _flush_folder(folder: Path) -> None:
    """Have the names in a folder written to the disk, where the system can."""
    if os.name != "posix":
        return
    descriptor = os.open(folder, os.O_RDONLY)
    try:
        with suppress(OSError):  # some network file systems have no such call for folders
            os.fsync(descriptor)
    finally:
        os.close(descriptor)
