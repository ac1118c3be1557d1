"""A worker process: reads tasks from its standard input, answers on its standard output, and ends when the input does.

Started by `processes` as a program of its own. What a kernel prints goes to standard error. A worker whose driver is
gone, however that ended, is gone a second later.
"""

from __future__ import annotations

import faulthandler
import functools
import os
import pickle
import queue
import shutil
import sys
import threading
import time
from collections.abc import Callable
from typing import Any, BinaryIO

from narrowgauge.kernel.command import abandon
from narrowgauge.measure.task import Bench, Job, run_task

__all__ = ["READY", "Asked", "serve"]

Asked = tuple[Job, Callable[[Bench], Any], int | None]  # the audit, a task, and its level if it has one

READY = "ready"
_GRACE = 1.0  # seconds that a worker without a driver may take to end by itself


def serve(trace: int, driver: int, scratch: str) -> None:
    """Serve the driver until it ends; a crash writes the stack of Python calls to the open file `trace`, if not 0.

    The folder `scratch` is the driver's, to be removed by the workers where the process `driver` is gone and cannot.
    """
    if trace:
        faulthandler.enable(trace, all_threads=False)
    # The pipes move to numbers of their own, so that nothing that a kernel reads or prints gets into them.
    requests, replies = os.fdopen(os.dup(0), "rb"), os.fdopen(os.dup(1), "wb")
    nowhere = os.open(os.devnull, os.O_RDONLY)
    os.dup2(nowhere, 0)
    os.dup2(2, 1)
    if hasattr(os, "register_at_fork"):  # a process that the kernel forks must not hold the pipes open, or use them
        for pipe in (requests, replies):
            os.register_at_fork(after_in_child=functools.partial(os.close, pipe.fileno()))
    waiting: queue.SimpleQueue[Asked | None] = queue.SimpleQueue()
    leave = functools.partial(_leave, os.getpid(), driver, scratch)
    threading.Thread(target=_read, args=(requests, waiting, leave), daemon=True).start()
    _answer(replies, READY, leave)
    own = os.getpid()
    while (asked := waiting.get()) is not None:
        reply = run_task(*asked)
        if os.getpid() != own:  # a fork that the kernel let go on: the pipes' numbers may be other files' by now
            os._exit(0)
        _answer(replies, reply, leave)
        try:
            sys.stdout.flush()
        except BaseException:  # the kernel may have closed it, or put something of its own there
            continue
    leave()


def _read(requests: BinaryIO, waiting: queue.SimpleQueue[Asked | None], leave: Callable[[], None]) -> None:
    """Pass on what the driver sends; when it is gone, end this process, also in the middle of a block."""
    while True:
        try:
            waiting.put(pickle.load(requests))
        except (EOFError, OSError, pickle.UnpicklingError):
            break
    waiting.put(None)
    time.sleep(_GRACE)
    leave()
    os._exit(1)


def _leave(worker: int, driver: int, scratch: str) -> None:
    """End a command that still runs, and remove what a driver that is gone has left; in the process `worker` alone."""
    if os.getpid() == worker:
        abandon()
        if os.getppid() != driver:
            shutil.rmtree(scratch, ignore_errors=True)


def _answer(replies: BinaryIO, answer: object, leave: Callable[[], None]) -> None:
    try:
        pickle.dump(answer, replies)
        replies.flush()
    except OSError:  # nobody listens, or this is a fork of the worker that the kernel let go on
        leave()
        os._exit(1)
