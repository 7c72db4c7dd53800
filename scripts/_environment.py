"""The environment that demo.py and test.py run in: made once, then used without a network.

Standard library only, and nothing here may stop an old Python 3 from reading the file: it has to
be able to say that it is too old.
"""

import contextlib
import hashlib
import os
import platform
import re
import shutil
import subprocess
import sys
from pathlib import Path

try:
    import fcntl
except ImportError:  # Windows
    fcntl = None

ROOT = Path(__file__).resolve().parent.parent
HOME = ROOT / ".venv-viewshed"
NEEDED = (3, 11)

_FETCH = "is the network there, and the package index within reach?"
_BUILD = "there may be no ready-made package for this Python and machine."
#: What pip writes when it cannot go on, what it was about, and where to look for the cure.
_TROUBLE = (
    (r"(No space left on device)", "{}", "make room."),
    (r"No matching distribution found for (\S+)", "could not fetch {}", _FETCH),
    (r"(conflicting dependencies)", "pyproject.toml asks for {}", "mend its versions."),
    (r"Failed (?:building wheel for|to build) (\S+)", "could not build {}", _BUILD),
)

#: Open lock files: while this process lives nobody removes the environments it uses.
_HELD = []


class Trouble(Exception):
    """Something outside the project is missing; the message is one line and names the cure."""


def check_python():
    """Raise `Trouble` unless this Python is new enough and can make environments."""
    if sys.version_info < NEEDED:
        wanted = "Python {}.{} or newer is needed".format(*NEEDED)
        found = f"this is {platform.python_version()} ({sys.executable})"
        message = f"{wanted}, {found}: run the script with a newer python3"
        raise Trouble(message)
    for module in ("venv", "ensurepip"):
        try:
            __import__(module)
        except ImportError:
            message = (
                f"this Python ({sys.executable}) has no {module} module: install it (Debian and "
                "Ubuntu: apt install python3-venv) or use another Python"
            )
            raise Trouble(message) from None


def project():
    """Return pyproject.toml as a dictionary."""
    import tomllib  # noqa: PLC0415  newer than the oldest Python that reads this file

    return tomllib.loads((ROOT / "pyproject.toml").read_text(encoding="utf-8"))


def group(name):
    """Return the requirements of a dependency group, included groups resolved."""
    groups = project()["dependency-groups"]
    found = []
    for entry in groups[name]:
        found += group(entry["include-group"]) if isinstance(entry, dict) else [entry]
    return found


def lower_bounds():
    """Return the dependencies of the package pinned to their lower bounds."""
    return [entry.replace(">=", "==") for entry in project()["project"]["dependencies"]]


def family(purpose):
    """Return what the names of all environments of a purpose and this Python begin with."""
    return "{}-py{}.{}".format(purpose, *sys.version_info[:2])


def key(purpose):
    """Return the name of the environment for a purpose: it changes with all that it depends on."""
    digest = hashlib.sha256((ROOT / "pyproject.toml").read_bytes())
    for part in (str(ROOT), os.path.realpath(sys.executable), sys.version, platform.machine()):
        digest.update(b"\0" + part.encode())
    return f"{family(purpose)}-{digest.hexdigest()[:12]}"


def interpreter(folder):
    """Return the Python of an environment."""
    return folder / ("Scripts/python.exe" if os.name == "nt" else "bin/python")


def command(python, name):
    """Return the path of a console script that stands beside a Python."""
    return python.with_name(name + ".exe" if os.name == "nt" else name)


def clean_environ():
    """Return the variables for a child, without those that would lead it to other packages."""
    dropped = ("PYTHONPATH", "PYTHONHOME", "PYTHONSTARTUP", "VIRTUAL_ENV", "__PYVENV_LAUNCHER__")
    kept = {name: value for name, value in os.environ.items() if name not in dropped}
    kept["PYTHONNOUSERSITE"] = "1"
    kept["PIP_DISABLE_PIP_VERSION_CHECK"] = "1"
    return kept


def _lock(handle, shared):
    """Lock a file for users (shared) or for the maker; the system lets go if we are killed."""
    if fcntl is None:
        _lock_windows(handle, shared)
        return
    mode = fcntl.LOCK_SH if shared else fcntl.LOCK_EX
    try:
        fcntl.flock(handle, mode | fcntl.LOCK_NB)
    except OSError:
        say("waiting for another run that is making the environment")
        fcntl.flock(handle, mode)


def _lock_windows(handle, shared):
    """Lock the first byte for the maker only; the system itself gives up after ten seconds."""
    import msvcrt  # noqa: PLC0415  is on Windows only

    handle.seek(0)
    if shared:
        with contextlib.suppress(OSError):
            msvcrt.locking(handle.fileno(), msvcrt.LK_UNLCK, 1)
        return
    while True:
        with contextlib.suppress(OSError):
            msvcrt.locking(handle.fileno(), msvcrt.LK_LOCK, 1)
            return


def _sweep(purpose, name):
    """Remove the environments of a purpose that an older pyproject.toml asked for."""
    if fcntl is None:
        return
    for lock in HOME.glob(family(purpose) + "-*.lock"):
        if lock.stem == name:
            continue
        with lock.open("a+") as handle, contextlib.suppress(OSError):
            fcntl.flock(handle, fcntl.LOCK_EX | fcntl.LOCK_NB)
            shutil.rmtree(str(HOME / lock.stem), ignore_errors=True)
            (HOME / (lock.stem + ".log")).unlink()


def say(text):
    """Write a line of progress to stderr."""
    print("viewshed: " + text, file=sys.stderr, flush=True)


def prepare(purpose, requirements=(), constraints=(), files=()):
    """Make the environment for a purpose, or find the one made before.

    Parameters
    ----------
    purpose : str
        Names the environment: run, test or lowest.
    requirements : sequence of str
        What to install beside the package.
    constraints : sequence of str
        Versions to hold to.
    files : sequence of str
        Packages of which only files are read: installed without what they depend on.

    Returns
    -------
    pathlib.Path
        The Python of the environment, in which the package is installed from this tree.

    Raises
    ------
    Trouble
        If something needed is missing.
    """
    name = key(purpose)
    folder, stamp = HOME / name, HOME / name / "complete"
    try:
        HOME.mkdir(exist_ok=True)
        handle = (HOME / (name + ".lock")).open("a+")
        _HELD.append(handle)
        _lock(handle, shared=True)
        if not stamp.exists():
            _lock(handle, shared=False)
            if not stamp.exists():
                _make(folder, requirements, constraints, files)
                stamp.touch()
                _sweep(purpose, name)
            _lock(handle, shared=True)
    except OSError as error:
        message = f"cannot make an environment in {HOME}: {error}"
        raise Trouble(message) from None
    return interpreter(folder)


def _make(folder, requirements, constraints, files):
    """Build an environment from nothing, whatever an interrupted run left there."""
    say(f"making an environment in {folder} (first time: some minutes)")
    if folder.exists():
        shutil.rmtree(str(folder))
    log = HOME / (folder.name + ".log")
    with log.open("w", encoding="utf-8") as out:
        _logged([sys.executable, "-m", "venv", str(folder)], out, log)
        pip = [str(interpreter(folder)), "-m", "pip", "install", "--prefer-binary"]
        pip += ["--retries", "2", "--progress-bar", "off", "--no-input"]
        if files:
            _logged([*pip, "--no-deps", *files], out, log)
        if constraints:
            pinned = folder / "constraints.txt"
            pinned.write_text("\n".join(constraints) + "\n", encoding="utf-8")
            pip += ["--constraint", str(pinned)]
        _logged([*pip, "--editable", str(ROOT), *requirements], out, log)


def _logged(words, out, log):
    """Run a command with its output in a log; on failure say in one line what went wrong."""
    # The child keeps the lock: should we be killed, nobody builds here until it has ended too.
    inherited = [] if fcntl is None else [handle.fileno() for handle in _HELD]
    done = subprocess.run(
        words,
        stdout=out,
        stderr=subprocess.STDOUT,
        cwd=str(ROOT),
        env=clean_environ(),
        pass_fds=inherited,
        check=False,
    )
    if done.returncode == 0:
        return
    text = log.read_text(encoding="utf-8", errors="replace")
    lines = [line.strip() for line in text.splitlines() if line.strip()]
    what, cure = (lines[-1] if lines else "pip failed"), _FETCH
    for pattern, about, hint in _TROUBLE:
        found = re.search(pattern, text)
        if found:
            what, cure = about.format(found.group(1).rstrip(".,")), hint
            break
    message = f"{what}; {cure} The whole story: {log}"
    raise Trouble(message)


def run(main):
    """Run a script's main function and leave with its exit code; trouble is one line."""
    try:
        check_python()
        code = main()
    except Trouble as trouble:
        say(str(trouble))
        code = 1
    except KeyboardInterrupt:
        code = 130
    sys.exit(code)
