"""The store of a run, and how a run is published: whole or not at all.

**Stages.** A stage is a named pure step. Its key is the hash of its name, the code and everything it depends on
(file hashes, options, keys of earlier stages); its outputs lie under that key in the run's store. A stage whose key
is there already is not run again: ``--resume`` and repeated runs follow from that, and nothing else caches.

**Publishing.** A run is built in ``.NAME.partial`` beside its final folder ``NAME``. When all of it stands, the file
``run.json`` last, the folder is renamed into place; a folder that it replaces steps aside as ``.NAME.previous`` until
the new one stands. `RunFolder.recover` puts right whatever a crash left.
"""

from __future__ import annotations

import errno
import fcntl
import hashlib
import json
import os
import shutil
import time
from collections.abc import Callable, Iterator, Mapping
from contextlib import contextmanager, suppress
from dataclasses import dataclass, field, fields
from functools import cache
from pathlib import Path
from typing import IO, TYPE_CHECKING, Any, TypeVar

from basinwright.errors import InputRejected, PublishError

if TYPE_CHECKING:
    import numpy as np
    import pandas as pd
    from numpy.typing import NDArray

T = TypeVar("T")

STORE = ".store"
_TRIAL_BYTES = 4_000_000
MANIFEST = "run.json"


def canonical(value: Any) -> bytes:
    """Return plain values as bytes that are the same wherever the values are."""
    return json.dumps(value, sort_keys=True, separators=(",", ":"), ensure_ascii=False).encode()


def file_sha256(path: Path) -> str:
    """Return the SHA-256 of a file's bytes."""
    with path.open("rb") as stream:
        return hashlib.file_digest(stream, "sha256").hexdigest()


@cache
def code_version() -> str:
    """Return the hash of this package's source: any change of code makes new keys."""
    package = Path(__file__).parent
    digest = hashlib.sha256()
    for path in sorted(package.rglob("*")):
        if path.suffix in (".py", ".csv", ".toml"):
            digest.update(path.relative_to(package).as_posix().encode())
            digest.update(path.read_bytes())
    return digest.hexdigest()


@dataclass(frozen=True)
class Entry:
    """The outputs of one stage: files in a folder that is never changed once it stands."""

    name: str
    key: str
    folder: Path

    def array(self, name: str) -> NDArray[Any]:
        """Open an array without reading it into memory; what is written to it is not kept."""
        import numpy as np

        return np.asarray(np.load(self.folder / f"{name}.npy", mmap_mode="c", allow_pickle=False))

    def values(self, name: str) -> Any:
        """Read plain values."""
        return json.loads((self.folder / f"{name}.json").read_text(encoding="utf-8"))

    def record(self, kind: type[T], name: str) -> T:
        """Read a dataclass that `Draft.record` kept."""
        plain = self.values(name)
        return kind(**{f.name: self._field(name, f.name, plain) for f in fields(kind)})  # type: ignore[arg-type]

    def frame(self, name: str) -> pd.DataFrame:
        """Read a table that `Draft.frame` kept."""
        import numpy as np
        import pandas as pd

        columns = {}
        for stem, different in self.values(name):
            array = self.array(f"{name}.{stem}")
            columns[stem] = array if different is None else np.array(different, dtype=object)[array]
        return pd.DataFrame(columns, copy=True)

    def _field(self, name: str, part: str, plain: dict[str, Any]) -> Any:
        import numpy as np

        if part not in plain:
            return self.array(f"{name}.{part}")
        value = plain[part]
        return np.array(value["texts"], dtype=object) if isinstance(value, dict) and "texts" in value else value


class Draft:
    """What a stage writes into while it runs."""

    def __init__(self, folder: Path) -> None:
        self.folder = folder
        self.workers_peak_mb = 0.0
        """What other processes held for this stage at most."""

    def array(self, name: str, array: np.ndarray) -> None:
        """Keep an array; one that was made in its place, by mapping that file, is there already.

        Raises
        ------
        OSError
            Where the disk did not take all of it.
        """
        import numpy as np

        path = self.folder / f"{name}.npy"
        mapped = isinstance(array, np.memmap) and not isinstance(array.base, np.ndarray)  # nor a part of one
        if mapped and array.filename == path.resolve():  # type: ignore[attr-defined]
            return
        np.save(path, array, allow_pickle=False)
        try:  # numpy does not notice when its last few kilobytes are not taken
            np.load(path, mmap_mode="r", allow_pickle=False)
        except (ValueError, EOFError):
            raise OSError(errno.ENOSPC, os.strerror(errno.ENOSPC)) from None

    def frame(self, name: str, frame: pd.DataFrame) -> None:
        """Keep a table of numbers and texts."""
        import pandas as pd

        columns: list[tuple[str, list[str] | None]] = []
        for stem in frame:
            array, different = frame[stem].to_numpy(), None
            if array.dtype == object:
                array, names = pd.factorize(array)
                different = names.tolist()
            self.array(f"{name}.{stem}", array)
            columns.append((str(stem), different))
        self.values(name, columns)

    def values(self, name: str, values: Any) -> None:
        """Keep plain values."""
        (self.folder / f"{name}.json").write_bytes(canonical(values))

    def record(self, record: Any, name: str) -> None:
        """Keep a dataclass of arrays, texts and plain values."""
        import numpy as np

        plain: dict[str, Any] = {}
        for part in fields(record):
            value = getattr(record, part.name)
            if isinstance(value, np.ndarray) and value.dtype != object:
                self.array(f"{name}.{part.name}", value)
            elif isinstance(value, np.ndarray):
                plain[part.name] = {"texts": value.tolist()}
            else:
                plain[part.name] = value.item() if isinstance(value, np.generic) else value
        self.values(name, plain)


@dataclass
class StageRecord:
    """What the manifest says of a stage."""

    name: str
    key: str
    reused: bool
    seconds: float
    peak_memory_mb: float | None
    variant: str = ""

    def describe(self) -> dict[str, Any]:
        """Return it as plain values."""
        return {
            "stage": self.name,
            "key": self.key,
            "runs": 0 if self.reused else 1,
            "seconds": round(self.seconds, 3),
            "peak_memory_mb": self.peak_memory_mb,
        }


@dataclass
class Store:
    """The stages of one run.

    Parameters
    ----------
    folder : Path
        Where outputs lie.
    earlier : Path or None
        The store of the run that this one continues: its stages are taken over by link
        where their key is the same.
    on_stage : callable
        Called with the stage's title when it starts to compute.
    variant : str
        What the stages are run for now: a scenario or another cell size; empty for the base.
    """

    folder: Path
    earlier: Path | None = None
    on_stage: Callable[[str], None] = lambda title: None
    records: list[StageRecord] = field(default_factory=list)
    variant: str = ""

    def stage(self, name: str, title: str, depends_on: Mapping[str, Any], make: Callable[[Draft], None]) -> Entry:
        """Return the outputs of a stage, computing them only where they are not there yet.

        Parameters
        ----------
        name, title : str
            Name in the store, and words for the screen.
        depends_on : mapping
            Plain values: everything the outputs depend on.
        make : callable
            Computes and writes the outputs into the draft that it is handed.
        """
        key = _key(name, depends_on)
        final = self.folder / f"{name}-{key}"
        started = time.perf_counter()
        reused = final.is_dir() or self._take_over(final)
        peak: float | None = None
        if not reused:
            self._say(title)
            self.folder.mkdir(parents=True, exist_ok=True)
            draft = _draft(final)
            shutil.rmtree(draft, ignore_errors=True)
            draft.mkdir()
            reset_peak_memory()
            work = Draft(draft)
            make(work)
            own_peak = peak_memory_mb()
            peak = None if own_peak is None else round(own_peak + work.workers_peak_mb, 1)
            draft.rename(final)
        self._record(name, key, reused, started, peak)
        return Entry(name, key, final)

    @contextmanager
    def watched(self, name: str, title: str, depends_on: Mapping[str, Any]) -> Iterator[None]:
        """Record a stage whose results are files of the run itself: it runs every time, and the store keeps nothing.

        Parameters
        ----------
        name, title, depends_on
            As in `stage`.
        """
        self._say(title)
        started = time.perf_counter()
        reset_peak_memory()
        yield
        self._record(name, _key(name, depends_on), False, started, peak_memory_mb())

    @contextmanager
    def running(self, variant: str) -> Iterator[None]:
        """Record stages as those of a variant."""
        self.variant = variant
        yield
        self.variant = ""

    def _record(self, name: str, key: str, reused: bool, started: float, peak_mb: float | None) -> None:
        self.records.append(StageRecord(name, key, reused, time.perf_counter() - started, peak_mb, self.variant))

    def _say(self, title: str) -> None:
        self.on_stage(f"{self.variant}: {title}" if self.variant else title)

    def described(self, variant: str = "") -> list[dict[str, Any]]:
        """Return what the manifest says of the stages of a variant."""
        return [record.describe() for record in self.records if record.variant == variant]

    def most_memory(self) -> str:
        """Say how much memory the run took at most, and in which stage."""
        measured = [record for record in self.records if record.peak_memory_mb is not None]
        if not measured:
            return "Done"
        most = max(measured, key=lambda record: record.peak_memory_mb or 0.0)
        stage = f"{most.variant}: {most.name}" if most.variant else most.name
        return f"Done; at most {most.peak_memory_mb:,.0f} MB of memory, in stage {stage} (run.json: all stages)"

    def _take_over(self, final: Path) -> bool:
        source = self.earlier / final.name if self.earlier else None
        if source is None or not source.is_dir():
            return False
        link_tree(source, final)
        return True

    def prune(self) -> None:
        """Drop whatever this run did not use."""
        used = {f"{record.name}-{record.key}" for record in self.records}
        for entry in self.folder.iterdir() if self.folder.is_dir() else ():
            if entry.name not in used:
                shutil.rmtree(entry)


def _key(name: str, depends_on: Mapping[str, Any]) -> str:
    return hashlib.sha256(canonical([name, code_version(), depends_on])).hexdigest()[:20]


def reset_peak_memory() -> None:
    """Forget the most memory that this process has held, where the system can."""
    with suppress(OSError):  # Linux: forget the high-water mark, so that each stage has its own
        Path("/proc/self/clear_refs").write_text("5")


def peak_memory_mb() -> float | None:
    """Return the most memory that this process has held since the last reset [MB], mapped files included."""
    try:
        status = Path("/proc/self/status").read_text()
    except OSError:
        return None
    line = next((line for line in status.splitlines() if line.startswith("VmHWM:")), None)
    return round(int(line.split()[1]) / 1024, 1) if line else None


def link_tree(source: Path, target: Path) -> None:
    """Copy a folder by hard links where the file system has them: cheap, and the files are never changed in place."""
    draft = _draft(target)
    shutil.rmtree(draft, ignore_errors=True)
    draft.parent.mkdir(parents=True, exist_ok=True)
    shutil.copytree(source, draft, copy_function=_link)
    draft.rename(target)


def _link(source: str | Path, target: str | Path) -> None:
    try:
        os.link(source, target)
    except OSError:
        shutil.copy2(source, target)


def _draft(target: Path) -> Path:
    return target.with_name(f"{target.name}.draft")


class RunFolder:
    """The folder of a run: built aside, put in place by renaming.

    Parameters
    ----------
    final : Path
        Where the run shall stand.
    """

    def __init__(self, final: Path) -> None:
        self.final = Path(os.path.realpath(final))
        self.partial = self.beside("partial")
        self.previous = self.beside("previous")
        self._lock = self.beside("lock")
        self._made: list[Path] = []

    def beside(self, what: str) -> Path:
        """Return the place of something that belongs to the run but does not stand in it."""
        return self.final.with_name(f".{self.final.name}.{what}")

    @contextmanager
    def locked(self) -> Iterator[None]:
        """Hold the folder against a second run; the lock dies with the process.

        Raises
        ------
        InputRejected
            Where another run holds it, or the place cannot be written.
        """
        with self._hold():
            try:
                self.recover()
                yield
            finally:
                self._lock.unlink(missing_ok=True)

    def _hold(self) -> IO[str]:
        while True:
            try:
                self._make(self.final.parent)
                stream = self._lock.open("w")
            except OSError as error:
                raise self._no_place(error) from None
            try:
                fcntl.flock(stream, fcntl.LOCK_EX | fcntl.LOCK_NB)
            except OSError:
                stream.close()
                what = "another run is writing this folder"
                raise InputRejected.one(str(self.final), "folder", what, "wait for it, or choose another") from None
            try:
                if os.path.samestat(os.fstat(stream.fileno()), self._lock.stat()):
                    return stream
            except FileNotFoundError:
                pass  # its last holder took it away while we waited: take a new one
            stream.close()

    def _make(self, folder: Path) -> None:
        """Make a folder and those above it, and remember them."""
        missing = [place for place in (folder, *folder.parents) if not place.exists()]
        for place in reversed(missing):
            place.mkdir(exist_ok=True)
            self._made.append(place)

    def _no_place(self, error: OSError) -> InputRejected:
        reason = error.strerror or str(error)
        return InputRejected.one(str(self.final), "folder", f"cannot be written ({reason})", "choose another place")

    def recover(self) -> None:
        """Put right what a crash left: the new run if it was complete, else the one before it."""
        if self.previous.is_dir() and not self.final.exists():
            complete = (self.partial / MANIFEST).is_file()
            (self.partial if complete else self.previous).rename(self.final)
        self._drop_previous()

    def refuse_absent(self) -> None:
        """Refuse a folder that is not there, nor left aside by a crash.

        Raises
        ------
        InputRejected
        """
        if not (self.final.is_dir() or self.previous.is_dir()):
            raise InputRejected.one(str(self.final), MANIFEST, "does not exist", "name the folder of a finished run")

    def refuse_occupied(self, *, resume: bool, overwrite: bool) -> None:
        """Refuse a folder that holds something that this run may not replace.

        Raises
        ------
        InputRejected
            Saying what to do.
        """
        final = str(self.final)
        if not self.final.exists():
            return
        if not self.final.is_dir():
            raise InputRejected.one(final, "folder", "is a file", "choose another place")
        if self._files_of(self.final) is not None:
            if not (resume or overwrite):
                fix = "add --resume to continue it, --overwrite to replace it, or choose another folder"
                raise InputRejected.one(final, "folder", "holds a run", fix)
        elif any(self.final.iterdir()):
            raise InputRejected.one(final, "folder", "holds files that are no run", "choose an empty or a new folder")

    def begin(self, *, keep: bool) -> Path:
        """Return the folder to build in, emptied of all but the store (and of that too unless ``keep``)."""
        try:
            for entry in self.partial.iterdir() if self.partial.is_dir() else ():
                if not (keep and entry.name == STORE):
                    shutil.rmtree(entry) if entry.is_dir() else entry.unlink()
            self.partial.mkdir(exist_ok=True)
        except OSError as error:
            raise self._no_place(error) from None
        return self.partial

    def begin_copy(self) -> Path:
        """Return the folder to build in, filled with links to the run's own files as they stand, but the manifest."""
        self.begin(keep=False)
        for name in sorted((self._files_of(self.final) or set()) - {MANIFEST}):
            source = self.final / name
            if source.is_dir():
                link_tree(source, self.partial / name)
            elif source.exists():
                _link(source, self.partial / name)
        return self.partial

    @contextmanager
    def building(self, *, keep: bool = False) -> Iterator[None]:
        """Build the run: whatever a library makes of a full disk is told as that, and nothing is put in place.

        Parameters
        ----------
        keep : bool
            Whether what stands of an unfinished run stays, to be continued.

        Raises
        ------
        PublishError
            Where the place cannot be written.
        """
        try:
            yield
        except Exception as error:
            full = self._unwritable() or (error if isinstance(error, OSError) else None)
            if not keep:
                self.discard()
            if full is None:
                raise
            raise PublishError(self._no_room(full)) from error

    def _unwritable(self) -> OSError | None:
        """Try to write a few megabytes, and return what the system says where it cannot."""
        trial = self.partial / "trial"
        try:
            trial.write_bytes(b"\1" * _TRIAL_BYTES)
        except OSError as error:
            return error
        finally:
            with suppress(OSError):
                trial.unlink()
        return None

    def _no_room(self, error: OSError) -> str:
        reason = error.strerror or str(error)
        free = shutil.disk_usage(next(folder for folder in self.final.parents if folder.is_dir())).free
        told = f"{self.final}: folder: cannot be written ({reason}; {free / 1e6:,.0f} MB free)"
        return f"{told}: make room, then repeat the command (run: with --resume)"

    def discard(self) -> None:
        """Take away what was built, and the folders that were made for it."""
        shutil.rmtree(self.partial, ignore_errors=True)
        self._lock.unlink(missing_ok=True)
        with suppress(OSError):  # somebody else has put something there by now
            while self._made:
                self._made.pop().rmdir()

    def publish(self) -> None:
        """Put what was built in place.

        Raises
        ------
        PublishError
            Where it could not: the folder is then as it was.
        """
        if not (self.partial / MANIFEST).is_file():
            raise PublishError(f"{self.partial}: incomplete: {MANIFEST} is written last")
        try:
            _flush(self.partial)
            if self.final.exists():
                self.final.rename(self.previous)
            self.partial.rename(self.final)
        except OSError as error:
            if self.previous.exists() and not self.final.exists():
                self.previous.rename(self.final)
            raise PublishError(f"{self.final}: could not be put in place ({error})") from None
        self._drop_previous()

    def _drop_previous(self) -> None:
        """Drop the run that was replaced, but hand on what other people had put into its folder."""
        dropped = self.beside("dropped")
        if self.previous.is_dir() and self.final.is_dir():
            ours = self._files_of(self.previous) or set()
            for entry in list(self.previous.iterdir()):
                if entry.name not in ours:
                    entry.rename(_free_name(self.final / entry.name))
            self.previous.rename(dropped)
        shutil.rmtree(dropped, ignore_errors=True)

    @staticmethod
    def _files_of(folder: Path) -> set[str] | None:
        """Return what the run in a folder wrote there, by its manifest; None where the folder holds no run."""
        try:
            about = json.loads((folder / MANIFEST).read_text(encoding="utf-8"))
            return set(about["files"]) | {MANIFEST} if "basinwright" in about else None
        except (OSError, ValueError, KeyError, TypeError):
            return None


def _free_name(path: Path) -> Path:
    """Return the path, or one like it that is not taken."""
    while path.exists():
        path = path.with_name(f"{path.name}.kept")
    return path


def _flush(folder: Path) -> None:
    """Have the files of a run on the disk before anything is renamed; its store can be computed again."""
    for path in (*(path for path in folder.rglob("*") if STORE not in path.parts and path.is_file()), folder):
        handle = os.open(path, os.O_RDONLY)
        try:
            os.fsync(handle)
        finally:
            os.close(handle)
