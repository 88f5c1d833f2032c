"""One calibration in a process of its own, so that its time and its memory are its own too."""

import multiprocessing
import sys
import time
from dataclasses import dataclass
from multiprocessing.connection import Connection
from pathlib import Path

from hybridtrack.calibration import calibrate
from hybridtrack.errors import DegenerateDataError, HybridtrackError
from hybridtrack.module import HybridModule, Target
from hybridtrack.recording import Recording


@dataclass(frozen=True)
class MeasuredCalibration:
    """The calibrated module, wall seconds of calibrating (kernels from cache), and the process's peak memory in GiB
    (None where the system does not say)."""

    module: HybridModule
    seconds: float
    peak_gib: float | None


def peak_memory_gib() -> float | None:
    """Largest resident size of this process so far."""
    try:
        import resource
    except ImportError:  # not on every system
        return None
    unit = 1 if sys.platform == "darwin" else 1024
    return resource.getrusage(resource.RUSAGE_SELF).ru_maxrss * unit / 2**30


def _calibrate_and_send(recording: Path, target: Target, nominal: HybridModule, answer: Connection) -> None:
    began = time.perf_counter()
    try:
        with Recording.open(recording) as opened:
            module = calibrate(opened, target, nominal).module
        answer.send((module.model_dump_json(), time.perf_counter() - began, peak_memory_gib()))
    except HybridtrackError as refusal:
        answer.send(str(refusal))


def calibrate_apart(recording: Path, target: Target, nominal: HybridModule) -> MeasuredCalibration:
    """Calibrate in a new process. Raises DegenerateDataError with the sentence of a refusal, or where it died."""
    context = multiprocessing.get_context("spawn")
    here, there = context.Pipe(duplex=False)
    worker = context.Process(target=_calibrate_and_send, args=(recording, target, nominal, there))
    worker.start()
    there.close()
    try:
        answer = here.recv()
    except EOFError:
        worker.join()
        raise DegenerateDataError(f"{recording}: calibration ended with exit code {worker.exitcode}") from None
    worker.join()
    if isinstance(answer, str):
        raise DegenerateDataError(answer)
    text, seconds, peak = answer
    return MeasuredCalibration(HybridModule.model_validate_json(text), seconds, peak)
