"""State of a long solve as files on the worker's own disk, carried to and from the run as bytes.

The quantum branch keeps its state in files next to a path it is given. The run may sit on another machine with no
folder in common, so the files travel inside one byte string whenever there are new ones.
"""

from __future__ import annotations

import contextlib
import tempfile
from collections.abc import Callable, Iterator
from pathlib import Path

import numpy as np

from manybody.workflow.encoding import EncodingError, pack, unpack

UNFINISHED = (".tmp", ".part", ".partial")  # endings of files that are being written


@contextlib.contextmanager
def state_files(checkpoint, report: Callable[[dict], None]) -> Iterator[tuple[Path, Callable[[dict], None]]]:
    """Give (path, progress): the path holds the files of an earlier state, if there was one; progress(dict) reports and
    sends new files on. Everything on disk goes when the part ends.
    """
    with tempfile.TemporaryDirectory(prefix="manybody-", dir=_scratch(), ignore_cleanup_errors=True) as folder:
        path = Path(folder) / "state"
        if checkpoint.state is not None:
            with contextlib.suppress(EncodingError):
                for name, content in unpack(checkpoint.state).items():
                    (Path(folder) / Path(name).name).write_bytes(content.tobytes())
        sent = _stamp(folder)

        def progress(info: dict) -> None:
            nonlocal sent
            report(info)
            stamp = _stamp(folder)
            if stamp and stamp != sent:  # the solver decides how often it is worth it
                sent = stamp
                files = {name: np.frombuffer(Path(folder, name).read_bytes(), np.uint8) for name, *_ in stamp}
                checkpoint.save(pack(files))
            else:
                checkpoint.stop_if_asked()

        yield path, progress


def _stamp(folder: str) -> list[tuple[str, int, int]]:
    """Name, time and size of the files of the state; those being written left out."""
    files = [path for path in Path(folder).iterdir() if path.is_file()]
    files = [
        path for path in files if not path.name.startswith(".") and path.suffix not in (".tmp", ".part", ".partial")
    ]
    return sorted((path.name, path.stat().st_mtime_ns, path.stat().st_size) for path in files)


def _scratch() -> str | None:
    """The worker's own scratch folder, which dask clears up even after a crash; None outside a worker."""
    import sys

    if "distributed" not in sys.modules:
        return None
    from distributed import get_worker

    try:
        folder = get_worker().local_directory
    except ValueError:
        return None
    return folder if Path(folder).is_dir() else None
