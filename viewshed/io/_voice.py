"""What the raster library says by itself: lines of its TIFF part are kept off standard error."""

import contextlib
import os
import select
import threading
from collections.abc import Iterator

_lock = threading.Lock()


@contextlib.contextmanager
def quiet_stderr() -> Iterator[None]:
    """Keep the TIFF library from printing what is reported as an error anyway.

    It writes straight to the process's standard error. That stream goes through a pipe meanwhile;
    everything else, such as a progress bar of another thread, passes on at once.
    """
    with _lock:
        try:
            real = -1 if os.name == "nt" else os.dup(2)
        except OSError:
            real = -1
        if real < 0:
            yield
            return
        source, sink = os.pipe()
        os.dup2(sink, 2)
        os.close(sink)
        done = threading.Event()
        reader = threading.Thread(target=_pass_on, args=(source, real, done), daemon=True)
        reader.start()
        try:
            yield
        finally:
            os.dup2(real, 2)
            done.set()
            reader.join()
            os.close(source)
            os.close(real)


def _pass_on(source: int, real: int, done: threading.Event) -> None:
    """Copy a pipe to a stream, leaving out the lines that the TIFF library prints.

    A child process may keep the other end open, so the end of the pipe is not waited for.
    """
    held, noise = b"", b"_tiff"
    while True:
        is_last = done.is_set()
        if not select.select([source], [], [], 0.0 if is_last else 0.01)[0]:
            if is_last:
                break
            continue
        piece = os.read(source, 65536)
        if not piece:
            break
        lines = (held + piece).splitlines(keepends=True)
        held = b""
        if not lines[-1].endswith(b"\n") and noise.startswith(lines[-1][: len(noise)]):
            held = lines.pop()
        _say(real, b"".join(line for line in lines if not line.startswith(noise)))
    _say(real, b"" if held.startswith(noise) else held)


def _say(real: int, text: bytes) -> None:
    with contextlib.suppress(OSError):
        os.write(real, text)
