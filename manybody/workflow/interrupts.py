"""Ctrl-C in two steps: the first asks to stop in good order, the second stops at once."""

from __future__ import annotations

import signal
import threading


class Interrupts:
    """While entered, SIGINT and SIGTERM set `stop`; another one raises KeyboardInterrupt. Elsewhere than in the main
    thread signals stay what they are.
    """

    def __init__(self) -> None:
        self.stop = False
        self._old: dict = {}

    def __enter__(self) -> Interrupts:
        if threading.current_thread() is threading.main_thread():
            self._old = {name: signal.signal(name, self._handle) for name in (signal.SIGINT, signal.SIGTERM)}
        return self

    def __exit__(self, *exc) -> None:
        for name, handler in self._old.items():
            signal.signal(name, handler)

    def _handle(self, number, frame) -> None:
        if self.stop:
            raise KeyboardInterrupt
        self.stop = True
