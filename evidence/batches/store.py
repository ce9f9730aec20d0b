"""A store: a folder of Parquet files, one per part, that survives being killed at any moment.

Each part is written beside its place and moved there in one stroke, so that a file under its
final name is whole. A part that cannot be read is set aside and done again. The manifest says what
was asked; a store that was asked something else refuses. A lock that the system takes back from a
dead process keeps a second run out.
"""

from __future__ import annotations

import contextlib
import json
import os
import re
import secrets
from collections.abc import Iterator, Mapping, Sequence
from pathlib import Path
from types import TracebackType
from typing import Any, Self

import numpy as np

from evidence.batches.findings import TRUST_CODE, status_code
from evidence.batches.results import NUMBERS, PartResult
from evidence.complaints import DataError, load_optional, sentence

__all__ = ["FORMAT", "Store", "is_store"]

FORMAT, VERSION = "evidence batch", 1
MANIFEST, LOCK = "_manifest.json", "_lock"
PART = re.compile(r"part-(\d{8})\.parquet")
KEPT_KEY = b"evidence"


def is_store(path: str | Path) -> bool:
    """Whether a folder holds the manifest of a batch."""
    return (Path(path) / MANIFEST).is_file()


class Store:
    """Parts of a batch in a folder.

    Parameters
    ----------
    path : str or Path
        The folder; made where it is not there.

    Attributes
    ----------
    manifest : dict
    set_aside : list of str
        Names of files that could not be read and are done again.
    """

    def __init__(self, path: str | Path) -> None:
        self.path = Path(path).expanduser()
        self._parquet = load_optional("pyarrow.parquet", "batch")
        self._arrow = load_optional("pyarrow", "batch")
        self.manifest: dict[str, Any] = {}
        self.set_aside: list[str] = []
        self._lock: Any = None

    # -- writing ---------------------------------------------------------------------------

    def open(self, asked: Mapping[str, Any]) -> Store:
        """Lock the folder for one run; keep what was asked, or compare it with the manifest.

        Raises
        ------
        DataError
            Another run works in it, it belongs to something else, or cannot be written.
        """
        with self._complaining():
            self.path.mkdir(parents=True, exist_ok=True)
            self._take_lock()
        try:
            if is_store(self.path):
                self.manifest = self._read_manifest()
                self._compare(asked)
            else:
                self._refuse_foreign()
                self.manifest = {"format": FORMAT, "version": VERSION, **asked}
                self._write_text(MANIFEST, json.dumps(self.manifest, indent=1))
            self._clean()
        except BaseException:
            self.close()
            raise
        return self

    def close(self) -> None:
        """Give the lock back."""
        if self._lock is not None:
            self._lock.close()
            self._lock = None

    def __enter__(self) -> Self:
        """Nothing more to do."""
        return self

    def __exit__(
        self,
        kind: type[BaseException] | None,
        error: BaseException | None,
        trace: TracebackType | None,
    ) -> None:
        """Give the lock back."""
        self.close()

    def write(self, part: PartResult) -> None:
        """Write one part: whole, or not at all.

        Raises
        ------
        DataError
            The disk is full or cannot be written; the parts before stay as they are.
        """
        table = self._arrow.table(self._columns(part))
        known = {"index": part.index, "first": part.first, "fingerprint": part.fingerprint,
                 "notes": {str(k): v for k, v in part.notes.items()}}  # fmt: skip
        table = table.replace_schema_metadata({KEPT_KEY: json.dumps(known).encode()})
        sink = self._arrow.BufferOutputStream()
        self._parquet.write_table(table, sink, compression="zstd")
        self._replace(_part_name(part.index), sink.getvalue().to_pybytes())

    def _columns(self, part: PartResult) -> dict[str, Any]:
        arrow = self._arrow
        columns = part.columns(self.manifest["candidates"])
        for name in ("candidate", "trust", "status"):
            columns[name] = arrow.array(columns[name], arrow.string()).dictionary_encode()
        notes = np.full(len(part), None, dtype=object)
        for place, note in part.notes.items():
            notes[place] = note
        columns["note"] = arrow.array(np.repeat(notes, len(self.manifest["candidates"])),
                                      arrow.string())  # fmt: skip
        return columns

    def _replace(self, name: str, content: bytes) -> None:
        temporary = self.path / f".{name}-{secrets.token_hex(6)}.tmp"
        with self._complaining():
            try:
                with open(temporary, "xb") as file:
                    file.write(content)
                    file.flush()
                    os.fsync(file.fileno())
                os.replace(temporary, self.path / name)
            except BaseException:
                with contextlib.suppress(OSError):
                    temporary.unlink(missing_ok=True)
                raise
            self._sync_folder()

    def _write_text(self, name: str, text: str) -> None:
        self._replace(name, text.encode())

    def _sync_folder(self) -> None:
        with contextlib.suppress(OSError):
            descriptor = os.open(self.path, os.O_RDONLY)
            try:
                os.fsync(descriptor)
            finally:
                os.close(descriptor)

    def _clean(self) -> None:
        """Remove what a killed run was still writing."""
        for left in self.path.glob(".*.tmp"):
            left.unlink(missing_ok=True)

    def _take_lock(self) -> None:
        file = open(self.path / LOCK, "a+b")  # noqa: SIM115 - held open as long as the run lasts
        try:
            _lock_file(file)
        except OSError:
            file.close()
            raise DataError(
                f"another run is writing into {self.path}. Wait for it, or give another --store."
            ) from None
        self._lock = file

    def _refuse_foreign(self) -> None:
        there = [p.name for p in self.path.iterdir() if p.name != LOCK]
        if there:
            raise DataError(
                sentence(
                    f"{self.path} is not empty and holds no {MANIFEST}",
                    ", ".join(sorted(there)[:3]),
                    "Give a folder of its own to the store",
                )
            )

    def _compare(self, asked: Mapping[str, Any]) -> None:
        for name, wanted in asked.items():
            if name in ("created", "total", "part_size"):
                continue
            had = self.manifest.get(name)
            if had != wanted:
                raise DataError(
                    f"{self.path} was begun with {_difference(name, had, wanted)}, so that its "
                    "rows and new ones would not belong together. Give another store, or remove "
                    "this one."
                )

    # -- reading ---------------------------------------------------------------------------

    @classmethod
    def read(cls, path: str | Path) -> Store:
        """Open a store to look at, whether or not a run is writing into it.

        Raises
        ------
        DataError
            There is none, or it is of another version.
        """
        store = cls(path)
        if not is_store(store.path):
            raise DataError(f"{path} is not a store of a batch: it holds no {MANIFEST}.")
        store.manifest = store._read_manifest()
        return store

    def _read_manifest(self) -> dict[str, Any]:
        try:
            manifest = json.loads((self.path / MANIFEST).read_text(encoding="utf-8"))
            known = manifest["format"] == FORMAT and manifest["version"] == VERSION
        except (OSError, ValueError, KeyError, TypeError) as error:
            raise DataError(f"{self.path / MANIFEST} cannot be read: {error}.") from error
        if not known:
            raise DataError(
                sentence(
                    f"{self.path} must be a store of format {FORMAT!r}, version {VERSION}",
                    f"{manifest['format']!r}, {manifest['version']}",
                )
            )
        return manifest

    def finished(self) -> dict[int, str]:
        """Parts that are whole: number -> fingerprint of what went in."""
        found = {}
        for number, file in self._files():
            try:
                known = self._known(self._parquet.read_schema(file))
                # the footer is at the end, and every page is listed in it: read all of it once
                self._parquet.read_table(file, columns=["log_evidence"])
                found[number] = known["fingerprint"]
            except Exception:  # whatever is wrong with the file, the part is done again
                self._put_aside(file)
        return found

    def parts(self) -> Iterator[PartResult]:
        """The whole parts, in order."""
        for _, file in self._files():
            try:
                table = self._parquet.read_table(file)
                part = self._part(table)
            except Exception:
                self.set_aside.append(file.name)
                continue
            yield part

    def _files(self) -> list[tuple[int, Path]]:
        matches = ((PART.fullmatch(p.name), p) for p in self.path.iterdir())
        return sorted((int(m[1]), p) for m, p in matches if m)

    def _put_aside(self, file: Path) -> None:
        self.set_aside.append(file.name)
        with self._complaining():
            os.replace(file, file.with_name(f"_unreadable-{file.name}"))

    def _known(self, schema: Any) -> dict[str, Any]:
        return json.loads(schema.metadata[KEPT_KEY])

    def _part(self, table: Any) -> PartResult:
        known = self._known(table.schema)
        k = len(self.manifest["candidates"])
        names = tuple(table.column("data_set").to_pylist()[::k])
        numbers = {
            name: table.column(name).to_numpy().reshape(-1, k) for name in (*NUMBERS, "probability")
        }
        trust = _codes(table.column("trust"), TRUST_CODE.__getitem__).reshape(-1, k)
        status = _codes(table.column("status"), status_code).reshape(-1, k)
        return PartResult(
            index=known["index"], first=known["first"], names=names, trust=trust, status=status,
            notes={int(k): v for k, v in known["notes"].items()},
            fingerprint=known["fingerprint"], **numbers,
        )  # fmt: skip

    @contextlib.contextmanager
    def _complaining(self) -> Iterator[None]:
        try:
            yield
        except OSError as error:
            reason = error.strerror or str(error)
            raise DataError(
                f"the store {self.path} cannot be written: {reason}. What is finished is kept; "
                "run the same again to go on."
            ) from error


def _codes(column: Any, code: Any) -> np.ndarray:
    column = column.combine_chunks()
    column = column if hasattr(column, "dictionary") else column.dictionary_encode()
    words = np.array([code(word) for word in column.dictionary.to_pylist()], np.int16)
    return words[column.indices.to_numpy(zero_copy_only=False)]


def _part_name(index: int) -> str:
    return f"part-{index:08d}.parquet"


def _difference(name: str, had: Any, wanted: Any) -> str:
    if isinstance(had, Mapping) and isinstance(wanted, Mapping):
        for key in {**had, **wanted}:
            if had.get(key) != wanted.get(key):
                return f"another {name.replace('_', ' ')} of {key!r}"
    if isinstance(had, Sequence) and not isinstance(had, str):
        return f"other {name.replace('_', ' ')} ({had} then, {wanted} now)"
    short = isinstance(had, str | int | type(None)) and len(str(had)) < 40
    return f"another {name.replace('_', ' ')}" + (f" ({had} then, {wanted} now)" if short else "")


def _lock_file(file: Any) -> None:
    """Take a lock that the system gives back when the process ends, however it ends."""
    try:
        import fcntl
    except ImportError:  # Windows
        import msvcrt

        file.seek(0)
        msvcrt.locking(file.fileno(), msvcrt.LK_NBLCK, 1)
        return
    fcntl.flock(file, fcntl.LOCK_EX | fcntl.LOCK_NB)
