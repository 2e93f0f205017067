"""Ctrl-C that loses nothing: the first asks the search to stop after the slice in flight, the second stops at once.

Python runs its signal handlers only between two of its own instructions, so a compiled kernel would hold a second
Ctrl-C back. The interpreter does write the signal's number to a socket the moment it arrives, and a small thread
reads it there.
"""

from __future__ import annotations

import contextlib
import os
import signal
import socket
import threading
from collections.abc import Callable, Iterator

INTERRUPTED_EXIT_CODE = 130


@contextlib.contextmanager
def listening(announce: Callable[[], None] = lambda: None) -> Iterator[Callable[[], bool]]:
    """Within the block, Ctrl-C and SIGTERM make the yielded function return True; a second one ends the process.

    ``announce`` is called once, from another thread, at the first. Outside the main thread, where signals cannot be
    listened to, the function simply stays False.
    """
    asked = threading.Event()
    if threading.current_thread() is not threading.main_thread():
        yield asked.is_set
        return
    reader, writer = socket.socketpair()
    writer.setblocking(False)

    def watch() -> None:
        while reader.recv(1) != b"\0":
            if asked.is_set():
                os._exit(INTERRUPTED_EXIT_CODE)
            asked.set()
            announce()

    watcher = threading.Thread(target=watch, name="interrupts", daemon=True)
    watcher.start()
    numbers = (signal.SIGINT, signal.SIGTERM)
    handlers = {number: signal.signal(number, lambda *_: None) for number in numbers}
    old_descriptor = signal.set_wakeup_fd(writer.fileno())
    try:
        yield asked.is_set
    finally:
        signal.set_wakeup_fd(old_descriptor)
        for number, handler in handlers.items():
            signal.signal(number, handler)
        writer.send(b"\0")
        watcher.join()
        reader.close()
        writer.close()
