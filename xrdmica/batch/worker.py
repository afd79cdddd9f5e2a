"""A worker process: takes a function and items from the parent through a pipe and sends back what comes out."""

from __future__ import annotations

import os
import pickle
import queue
import signal
import struct
import threading
import traceback
from collections.abc import Callable
from typing import IO, Any

from xrdmica.errors import XrdmicaError

__all__ = ["STARTED", "WorkerError", "guarded", "packed", "receive", "send", "serve"]

STARTED = b"started"  # sent when an item is unpacked and its modules are loaded: from here on its time counts
_SIZE = struct.Struct("<Q")


class WorkerError(Exception):
    """An error of a worker that is no `XrdmicaError`, in a form that travels between processes.

    Attributes
    ----------
    reason : str
        One sentence.
    trace : str
        Where it happened, for developers; may be empty.
    """

    def __init__(self, reason: str, trace: str = "") -> None:
        self.reason = reason
        self.trace = trace
        super().__init__(reason, trace)

    def __str__(self) -> str:
        return self.reason


def guarded(function: Callable[[Any], Any], item: Any) -> Any:
    """Apply the function; an exception becomes a value, for some exceptions cannot be sent between processes."""
    try:
        return function(item)
    except XrdmicaError as error:
        return error
    except Exception as error:
        return WorkerError(f"{type(error).__name__}: {error}", traceback.format_exc())


def packed(value: Any) -> bytes:
    """The value as bytes; what cannot be packed becomes an error that can."""
    try:
        data = pickle.dumps(value, protocol=5)
        if isinstance(value, Exception):
            pickle.loads(data)  # exceptions with arguments of their own pack but do not unpack
    except Exception as error:
        return pickle.dumps(WorkerError(f"the result cannot be sent between processes: {error}"), protocol=5)
    return data


def send(stream: IO[bytes], data: bytes) -> None:
    """Write one message."""
    stream.write(_SIZE.pack(len(data)))
    stream.write(data)
    stream.flush()


def receive(stream: IO[bytes]) -> bytes:
    """Read one message.

    Raises
    ------
    EOFError
        If the other side is gone.
    """
    head = stream.read(_SIZE.size)
    if len(head) < _SIZE.size:
        raise EOFError
    (size,) = _SIZE.unpack(head)
    data = stream.read(size)
    if len(data) < size:
        raise EOFError
    return data


def serve() -> None:
    """Work until the parent closes the pipe, or dies: the first message is the function, all others are items.

    A thread of its own reads the pipe, so that a worker whose parent was killed ends at once, also in the middle of an item.
    """
    # Ctrl-C reaches the whole process group: the parent alone decides what to do about it
    signal.signal(signal.SIGINT, signal.SIG_IGN)
    source, sink = os.fdopen(os.dup(0), "rb"), os.fdopen(os.dup(1), "wb")
    os.dup2(os.open(os.devnull, os.O_RDONLY), 0)
    os.dup2(2, 1)  # what libraries print must not get between the messages
    messages: queue.SimpleQueue[bytes] = queue.SimpleQueue()

    def listen() -> None:
        while True:
            try:
                messages.put(receive(source))
            except (EOFError, OSError):
                os._exit(0)

    threading.Thread(target=listen, daemon=True).start()
    function = _unpacked(messages.get())
    while True:
        item = _unpacked(messages.get())
        send(sink, STARTED)
        broken = next((value for value in (function, item) if isinstance(value, _BrokenError)), None)
        value = WorkerError(str(broken)) if broken is not None else guarded(function, item)
        try:
            send(sink, packed(value))
        except OSError:
            os._exit(0)
        del item, value


class _BrokenError(Exception):
    """What arrived cannot be unpacked here."""


def _unpacked(data: bytes) -> Any:
    try:
        return pickle.loads(data)
    except Exception as error:
        hint = "; functions for workers must stand in a module that can be imported" if "__main__" in str(error) else ""
        return _BrokenError(f"the worker process cannot load its work: {error}{hint}")

