"""What something costs: processor and wall time of this process and its children, and memory."""

import os
import platform
import resource
import statistics
import threading
import time
from collections.abc import Callable, Iterator, Sequence
from contextlib import contextmanager
from dataclasses import dataclass
from pathlib import Path
from typing import Any, Final

_SAMPLE_SECONDS: Final = 0.05


@dataclass(frozen=True, slots=True, kw_only=True)
class Cost:
    """Seconds of processor, of the process tree, and of the clock on the wall."""

    cpu: float
    wall: float


def cost_of(work: Callable[[], object]) -> Cost:
    """Return what a piece of work costs."""
    cpu, wall = _cpu(), time.perf_counter()
    work()
    return Cost(cpu=_cpu() - cpu, wall=time.perf_counter() - wall)


def _cpu() -> float:
    used = [resource.getrusage(who) for who in (resource.RUSAGE_SELF, resource.RUSAGE_CHILDREN)]
    return sum(one.ru_utime + one.ru_stime for one in used)


def interleaved(pairs: int, *works: Callable[[], object]) -> list[list[Cost]]:
    """Return the costs of pieces of work that take turns, so that a busy machine hits all alike.

    The first turn is not counted: it opens files for the first time.
    """
    for work in works:
        work()
    turns = [[cost_of(work) for work in works] for _ in range(pairs)]
    return [list(costs) for costs in zip(*turns, strict=True)]


def median_ratio(costs: Sequence[Cost], references: Sequence[Cost]) -> float:
    """Return the median, over turns, of processor time against that of the reference."""
    pairs = zip(costs, references, strict=True)
    return statistics.median(cost.cpu / reference.cpu for cost, reference in pairs)


class Memory:
    """The most that this process and its children held above what they held at first, in bytes."""

    def __init__(self) -> None:
        self._idle = _held()
        self.above_idle = 0

    def sample(self) -> None:
        """Look once."""
        self.above_idle = max(self.above_idle, _held() - self._idle)


@contextmanager
def memory_watched() -> Iterator[Memory]:
    """Watch memory (proportional set size) while something runs; looking takes time of its own."""
    memory = Memory()
    done = threading.Event()

    def watch() -> None:
        while not done.wait(_SAMPLE_SECONDS):
            memory.sample()

    thread = threading.Thread(target=watch, daemon=True)
    thread.start()
    try:
        yield memory
    finally:
        memory.sample()
        done.set()
        thread.join()


def _held() -> int:
    return sum(_proportional(pid) for pid in [os.getpid(), *_children(os.getpid())])


def _proportional(pid: int) -> int:
    try:
        text = Path(f"/proc/{pid}/smaps_rollup").read_text(encoding="ascii")
    except OSError:
        return 0
    lines = (line.split() for line in text.splitlines())
    return sum(int(line[1]) * 1024 for line in lines if line[0] == "Pss:")


def _children(pid: int) -> list[int]:
    try:
        tasks = list(Path(f"/proc/{pid}/task").glob("*/children"))
        own = [int(child) for task in tasks for child in task.read_text().split()]
    except OSError:
        return []
    return own + [grandchild for child in own for grandchild in _children(child)]


def machine() -> dict[str, Any]:
    """Describe this machine."""
    info = Path("/proc/cpuinfo")
    lines = info.read_text(encoding="utf-8").splitlines() if info.exists() else []
    models = [line.split(":", 1)[1].strip() for line in lines if line.startswith("model name")]
    return {
        "processor": models[0] if models else platform.processor(),
        "processors": os.cpu_count(),
        "memory_bytes": os.sysconf("SC_PAGE_SIZE") * os.sysconf("SC_PHYS_PAGES"),
        "system": platform.platform(),
        "python": platform.python_version(),
        "load_average": list(os.getloadavg()),
    }
