"""Check the style and the types, then run the tests, from nothing but Python 3.11 or newer.

    python3 scripts/test.py [--quick] [--lowest] [-- options of pytest]

The first run makes an environment in the tree, which needs the network; later runs do not.
"""

import argparse
import subprocess
import sys
import time

from _environment import ROOT, Trouble, clean_environ, group, lower_bounds, prepare, run

#: The Python for which the lower bounds of the dependencies are stated.
LOWEST = (3, 11)


def parse(words):
    """Return the options; what follows -- is for pytest."""
    split = words.index("--") if "--" in words else len(words)
    parser = argparse.ArgumentParser(
        description=__doc__.splitlines()[0], epilog="What follows -- goes to pytest."
    )
    parser.add_argument("--quick", action="store_true", help="leave out the tests marked slow")
    parser.add_argument(
        "--lowest",
        action="store_true",
        help="tests only, with every dependency at its lower bound (Python {}.{})".format(*LOWEST),
    )
    options = parser.parse_args(words[:split])
    options.pytest = words[split + 1 :]
    return options


def environment(options):
    """Return the Python to test with."""
    if not options.lowest:
        return prepare("test", group("dev"), files=group("data"))
    if sys.version_info[:2] != LOWEST:
        message = "--lowest needs Python {}.{}, this is {}.{}".format(*LOWEST, *sys.version_info)
        raise Trouble(message)
    return prepare("lowest", group("test"), lower_bounds(), group("data"))


def steps(options):
    """Return the (name, words after python -m) of what is to be run."""
    pytest = ["pytest", "-n", "2"]
    if options.quick:
        pytest += ["-m", "not slow"]
    tests = [("tests", pytest + options.pytest)]
    if options.lowest:
        return tests
    return [("style", ["ruff", "check", "."]), ("types", ["mypy"]), *tests]


def main():
    """Run the checks one after the other; return the worst exit code."""
    options = parse(sys.argv[1:])
    python = str(environment(options))
    results = []
    for name, words in steps(options):
        print("== {}: {}".format(name, " ".join(words)), flush=True)
        began = time.monotonic()
        code = subprocess.run(
            [python, "-m", *words], cwd=str(ROOT), env=clean_environ(), check=False
        ).returncode
        results.append((name, code, time.monotonic() - began))
    print("== result")
    for name, code, seconds in results:
        verdict = "passed" if code == 0 else f"failed ({code})"
        print(f"{name:<8}{verdict:<12}{seconds:7.1f} s")
    return max(abs(code) for _, code, _ in results)


if __name__ == "__main__":
    run(main)
