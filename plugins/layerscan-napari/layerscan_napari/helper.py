"""A second process for measurements of whole fields: the window's thread never waits for a lock that they hold.

Compiled kernels and the compiler itself keep Python's lock for longer than a window may stand still, so a thread is not
enough. The process is started at the first field, kept for the next (corrections answer faster), and ended when the
panel is hidden; a cancelled run ends it at once. ``python -m layerscan_napari.helper`` is its other end.
"""

from __future__ import annotations

import contextlib
import os
import pickle
import subprocess
import sys
import tempfile
import threading
from dataclasses import dataclass, replace
from pathlib import Path
from typing import TYPE_CHECKING, Any, BinaryIO

if TYPE_CHECKING:
    from layerscan.records import Progress

    from layerscan_napari.compute import Job, Result
    from layerscan_napari.traces import Segments

Outcome = tuple["Result", "Segments"]


@dataclass(frozen=True)
class StoredPixels:
    """Pixels in a file of their own; calling it maps them into memory."""

    path: str

    def __call__(self) -> Any:
        """Read-only pixels, mapped from the file."""
        import numpy as np

        return np.load(self.path, mmap_mode="r")


class Helper:
    """Runs one job at a time in a process of its own. Made and used from any thread."""

    def __init__(self) -> None:
        self._lock = threading.Lock()
        self._process: subprocess.Popen[bytes] | None = None

    def run(self, job: Job, progress: Progress) -> Outcome:
        """Measure a job there.

        Raises
        ------
        Interrupted
            The process was stopped meanwhile.
        LayerscanError
            What the measurement itself raised.
        """
        import numpy as np
        from layerscan.errors import Interrupted

        with self._lock, tempfile.TemporaryDirectory(prefix="layerscan-") as folder:
            pixels = Path(folder) / "pixels.npy"
            np.save(pixels, job.micrograph.load())
            sent = replace(job, micrograph=replace(job.micrograph, load=StoredPixels(str(pixels))))
            process = self._start()
            assert process.stdin is not None
            assert process.stdout is not None
            try:
                pickle.dump(sent, process.stdin)
                process.stdin.flush()
                while True:
                    kind, value = pickle.load(process.stdout)
                    if kind == "result":
                        result, segments = value
                        known = result.unedited and (job.unedited or result.unedited)
                        return replace(result, job=job, unedited=known), segments
                    if kind == "error":
                        raise value
                    progress(*value)
            except (EOFError, OSError, pickle.UnpicklingError):
                code = process.wait()
                if self._process is None:
                    raise Interrupted("Stopped on request.") from None
                self._process = None
                raise RuntimeError(
                    f"the measuring process ended with code {code}; too little memory is the usual cause"
                ) from None
            except Interrupted:
                self.stop()
                raise

    def _start(self) -> subprocess.Popen[bytes]:
        if self._process is None or self._process.poll() is not None:
            self._process = subprocess.Popen(
                [sys.executable, "-m", "layerscan_napari.helper"], stdin=subprocess.PIPE, stdout=subprocess.PIPE
            )
        return self._process

    def stop(self) -> None:
        """End the process at once; a run under way is interrupted."""
        process, self._process = self._process, None
        if process is not None:
            process.kill()
            process.wait()
            for stream in (process.stdin, process.stdout):
                if stream is not None:
                    with contextlib.suppress(OSError):
                        stream.close()

    @property
    def running(self) -> bool:
        """Whether the process is there."""
        return self._process is not None and self._process.poll() is None


def serve(jobs: BinaryIO, answers: BinaryIO) -> None:
    """Answer jobs until there are no more: progress, then the result or the error."""
    from layerscan_napari import compute, traces
    from layerscan_napari.budget import DragBudget

    def tell(kind: str, value: object) -> None:
        pickle.dump((kind, value), answers)
        answers.flush()

    while True:
        try:
            job = pickle.load(jobs)
        except EOFError:
            return
        try:
            result = compute.complete(job, DragBudget(), lambda what, fraction: tell("progress", (what, fraction)))
            assert result.measurement is not None
            tell("result", (result, traces.traced_segments(result.measurement)))
        except Exception as error:
            tell("error", error.with_traceback(None))


def main() -> None:
    """Serve on standard input and output; what libraries print goes to standard error."""
    answers = os.fdopen(os.dup(1), "wb")
    os.dup2(2, 1)
    with contextlib.suppress(BrokenPipeError, KeyboardInterrupt):
        serve(sys.stdin.buffer, answers)


if __name__ == "__main__":
    main()
