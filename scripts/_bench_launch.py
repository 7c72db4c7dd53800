"""Run one command and say as JSON what it took.

    python _bench_launch.py COMMAND [WORD ...]

The memory that a system reports for a process begins with what the process that started it held.
So this small one stands between the benchmark, which holds large arrays, and the command.
"""

import json
import os
import subprocess
import sys
import tempfile
import time


def launch(words):
    """Run a command.

    Parameters
    ----------
    words : list of str
        The command.

    Returns
    -------
    dict
        `code`, `wall` and `busy` (processor time) [s], `peak` (greatest resident memory) [bytes],
        and `said`, the end of what it wrote to stderr; None for what the system does not tell.
    """
    with tempfile.TemporaryFile() as said:
        start = time.perf_counter()
        child = subprocess.Popen(words, stdout=subprocess.DEVNULL, stderr=said)
        busy = peak = None
        if hasattr(os, "wait4"):
            _, status, used = os.wait4(child.pid, 0)
            child.returncode = os.waitstatus_to_exitcode(status)
            busy = used.ru_utime + used.ru_stime
            peak = used.ru_maxrss * (1 if sys.platform == "darwin" else 1024)
        code = child.wait()
        wall = time.perf_counter() - start
        said.seek(0)
        text = said.read().decode(errors="replace")[-2000:]
    return {"code": code, "wall": wall, "busy": busy, "peak": peak, "said": text}


if __name__ == "__main__":
    print(json.dumps(launch(sys.argv[1:])))
