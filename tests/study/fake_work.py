"""Work functions that stand in for measuring an image: what they do is in the file's name or text."""

from __future__ import annotations

import errno
import os
import signal
import time
from pathlib import Path

from layerscan.study.work import StepResult, Unit, UnitResult, describe_failure


def measure_text(unit: Unit) -> UnitResult:
    """Read numbers (layer thicknesses in nm) from a text file and hand them back as a measurement would.

    Words in the file make trouble: ``kill`` ends the process, ``sleep`` outlasts a deadline, ``memory`` asks for too
    much, ``crash`` raises, ``once`` raises the first time only, ``full`` finds no space on the disk.
    """
    text = Path(unit.path).read_text()
    step = unit.steps[0]
    try:
        _make_trouble(text, unit)
    except OSError as error:
        failure = describe_failure(step, error)
        return UnitResult(key=unit.key, results=(failure,), disk_full=error.errno == errno.ENOSPC)
    except Exception as error:
        return UnitResult(key=unit.key, results=(describe_failure(step, error),))
    values = [float(word) for word in text.split() if word[0].isdigit()]
    mean = sum(values) / len(values)
    average = {"mean": mean, "u": 1.0, "sd": 2.0, "n": len(values)}
    document = {
        "schema": "layerscan.measurement/1",
        "layered": True,
        "periodic": True,
        "structure": "lamellae",
        "flags": [],
        "period_nm": average,
        "dark_nm": None,
        "middle_nm": None,
        "bright_nm": None,
        "spacing_nm": {"value": mean, "u": 1.0, "method": "none"},
        "orientation_deg": 90.0,
        "image": {"pixel_size_nm": [1.0, 1.0], "u_pixel_size_relative": 0.01, "pixel_size_source": "test"},
        "budget": [],
    }
    layers = tuple((i, "dark", value, 1.0, 0.5, 1, "") for i, value in enumerate(values))
    return UnitResult(
        key=unit.key,
        results=(StepResult(step=step, state="done", document=document, layers=layers),),
        versions={"layerscan": "test"},
    )


def _make_trouble(text: str, unit: Unit) -> None:
    if "kill" in text:
        os.kill(os.getpid(), signal.SIGKILL)
    if "sleep" in text:
        time.sleep(60)
    if "memory" in text:
        bytearray(4 << 30)
    if "crash" in text:
        raise ZeroDivisionError("a bug")
    if "full" in text:
        raise OSError(errno.ENOSPC, "No space left on device")
    if "once" in text:
        marker = Path(unit.path + ".seen")
        if not marker.exists():
            marker.touch()
            raise ConnectionError("by chance")
    if "slow" in text:
        time.sleep(0.05)
