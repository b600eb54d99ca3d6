"""No interrupt is lost.

Python raises KeyboardInterrupt wherever the main thread happens to be. Inside a callback of the
garbage collector (JAX has one that runs often), a finaliser or a weak reference, an exception
cannot be passed on: Python hands it to `sys.unraisablehook` and goes on. Here such an interrupt is
sent again a moment later, when the callback has ended.
"""

import _thread
import sys
import threading
from collections.abc import Iterator
from contextlib import contextmanager

AGAIN_AFTER_SECONDS = 0.01


@contextmanager
def no_interrupt_lost() -> Iterator[None]:
    """Inside the block, send an interrupt again that a callback swallowed."""
    plain = sys.unraisablehook

    def hook(swallowed: "sys.UnraisableHookArgs") -> None:
        if not issubclass(swallowed.exc_type, KeyboardInterrupt):
            plain(swallowed)
            return
        again = threading.Timer(AGAIN_AFTER_SECONDS, _thread.interrupt_main)
        again.daemon = True
        again.start()

    sys.unraisablehook = hook
    try:
        yield
    finally:
        sys.unraisablehook = plain


def forget_interrupt() -> None:
    """Let the process end with the exit code it is given.

    After an interrupt inside `exec` of a text (dataclasses are made so) `python -m` would end by
    the signal, whatever the code; the interpreter forgets it when it next runs a text.
    """
    exec("")
