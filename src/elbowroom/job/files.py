"""Files that leave the program: written whole under another name, then renamed, so that none is ever half there."""

from __future__ import annotations

import csv
import os
from collections.abc import Iterable, Iterator, Mapping
from contextlib import contextmanager
from dataclasses import asdict
from pathlib import Path
from typing import Any

from elbowroom.base.errors import ElbowroomError, ExportError


@contextmanager
def written_whole(path: str | Path) -> Iterator[Path]:
    """Give a temporary name beside the target; rename it to the target when the block ends well.

    An older file of the target's name stays as it was until then, and for good if the block fails.

    Parameters
    ----------
    path : str or Path
        The target; its folder is made if need be.

    Yields
    ------
    Path
        Where to write.

    Raises
    ------
    ExportError
        If the folder or the file cannot be written.
    """
    target = Path(path)
    temporary = target.with_name(f".{target.name}.{os.getpid()}.part")
    if target.exists() and not target.is_file():
        msg = f"cannot write {target}: {'a folder' if target.is_dir() else 'no plain file'} stands there"
        raise ExportError(msg)
    try:
        target.parent.mkdir(parents=True, exist_ok=True)
        yield temporary
        with temporary.open("rb") as file:
            os.fsync(file.fileno())
        temporary.replace(target)
    except ElbowroomError:
        # Some are operating-system errors by birth; what they say must not be put down to this file.
        raise
    except OSError as cause:
        msg = f"cannot write {target}: {cause.strerror or cause}"
        raise ExportError(msg) from cause
    finally:
        # Gone after a rename; left over after a failure or an interrupt.
        try:
            temporary.unlink(missing_ok=True)
        except OSError:
            pass


def write_explained_csv(path: str | Path, rows: Iterable[Any], meanings: Mapping[str, str], head: Iterable[str]) -> None:
    """Write dataclass rows as CSV, under ``#`` lines that say what each column means.

    Parameters
    ----------
    path : str or Path
        The file.
    rows : iterable
        Instances of one dataclass.
    meanings : mapping of str to str
        What each of its fields means, in the order of the columns.
    head : iterable of str
        Lines that come first.

    Raises
    ------
    ExportError
        If the file cannot be written.
    """
    with written_whole(path) as temporary, temporary.open("w", newline="", encoding="utf-8") as file:
        for line in (*head, *(f"{name}: {meaning}" for name, meaning in meanings.items())):
            file.write(f"# {' '.join(line.split())}\n")
        writer = csv.DictWriter(file, list(meanings), lineterminator="\n")
        writer.writeheader()
        for row in rows:
            writer.writerow({k: f"{v:.9g}" if isinstance(v, float) else v for k, v in asdict(row).items()})
