"""One process and all that it starts: never longer than its limit, never left behind."""

from __future__ import annotations

import contextlib
import math
import os
import select
import signal
import subprocess
import threading
import time
from collections.abc import Mapping, Sequence
from dataclasses import dataclass
from pathlib import Path
from typing import BinaryIO

_LONGEST_WAIT = 2_000_000.0
"""Seconds; poll(2) counts milliseconds in 32 bits."""

_running: set[int] = set()
_running_lock = threading.Lock()


@dataclass(frozen=True, slots=True)
class Ended:
    """How a process ended; ``returncode`` is minus the signal's number where a signal ended it."""

    returncode: int
    timed_out: bool
    seconds: float


def limited(
    command: Sequence[str], *, memory_bytes: int, file_bytes: int, processor_seconds: float
) -> tuple[str, ...]:
    """``command`` under limits that the kernel keeps, also if deckgen itself is killed.

    A shell sets them and becomes the command; Python's own hook between fork and exec isn't safe
    in threads. A limit that the system doesn't know (memory, on macOS) is left out.
    POSIX counts file sizes in 512-byte blocks, the shells memory in KiB.
    """
    if min(memory_bytes, file_bytes) <= 0 or processor_seconds <= 0:
        raise ValueError("limits must be positive")
    limits = {
        "c": 0,
        "v": -(-memory_bytes // 1024),
        "f": -(-file_bytes // 512),
        "t": math.ceil(processor_seconds),
    }
    settings = "; ".join(f"ulimit -{letter} {value} 2>/dev/null" for letter, value in limits.items())
    return ("/bin/sh", "-c", settings + '; exec "$@"', "sh", *command)


def run_to_end(
    command: Sequence[str],
    *,
    folder: Path,
    environment: Mapping[str, str],
    stdout: BinaryIO,
    stderr: BinaryIO,
    seconds: float,
) -> Ended:
    """Run ``command`` in a session of its own, with no input; at the limit kill its whole group.

    Whatever the command leaves running in its group is killed as well, also when an exception
    such as ``KeyboardInterrupt`` passes through. ``OSError`` if it can't be started.
    """
    started = time.perf_counter()
    process = subprocess.Popen(
        command,
        cwd=folder,
        env=dict(environment),
        stdin=subprocess.DEVNULL,
        stdout=stdout,
        stderr=stderr,
        start_new_session=True,
    )
    in_time = True
    try:
        with _running_lock:
            _running.add(process.pid)
        in_time = _wait(process, min(seconds, _LONGEST_WAIT))
    finally:
        # On Linux the leader isn't reaped yet, so its number can't belong to somebody else.
        with _running_lock:
            _running.discard(process.pid)
            _kill_group(process.pid)
        returncode = process.wait()
    return Ended(returncode, timed_out=not in_time, seconds=time.perf_counter() - started)


def stop_all() -> int:
    """Kill every process that :func:`run_to_end` waits for in any thread; how many there were.

    For the thread that is interrupted while others wait: ctrl-C reaches only the main one,
    and not the simulators, which are in sessions of their own.
    """
    with _running_lock:
        for pid in _running:
            _kill_group(pid)
        return len(_running)


def _wait(process: subprocess.Popen[bytes], seconds: float) -> bool:
    """Wait, and tell whether the process ended within ``seconds``.

    ``Popen.wait(timeout)`` looks at growing intervals of up to 50 ms, which would double the
    time of a 5 ms run; a process descriptor wakes at once, and doesn't reap.
    """
    try:
        descriptor = os.pidfd_open(process.pid)
    except (AttributeError, OSError):  # not Linux, or a sandbox that forbids it
        try:
            process.wait(seconds)
        except subprocess.TimeoutExpired:
            return False
        return True
    try:
        poll = select.poll()
        poll.register(descriptor, select.POLLIN)
        return bool(poll.poll(max(0.0, seconds) * 1000))
    finally:
        os.close(descriptor)


def _kill_group(pid: int) -> None:
    # Already gone; or, on macOS, only a zombie is left in the group.
    with contextlib.suppress(ProcessLookupError, PermissionError):
        os.killpg(pid, signal.SIGKILL)
