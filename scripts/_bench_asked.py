"""What is asked: each figure against its yardstick, and whether it will do."""

from collections.abc import Callable
from dataclasses import dataclass

from _bench_common import CALM


@dataclass(frozen=True)
class Asked:
    """One figure of which something is asked.

    Attributes
    ----------
    group : str
        Entry of what was found.
    what, yardstick : str
        What is measured, and against what; in braces, sizes.
    must, aim : float or None
        What is asked at most (or at least), and what would be good.
    unit : str
        Put after each number.
    find : callable
        Gives from the entry and the sizes (label, number or None, share that other processes took)
        of all candidates; the worst counts.
    least : bool
        Whether more is better.
    places : int
        Places after the point.
    always : bool
        Whether it is asked whatever the size.
    """

    group: str
    what: str
    yardstick: str
    must: float
    aim: float | None
    unit: str
    find: Callable
    least: bool = False
    places: int = 2
    always: bool = False


def one(key):
    """Return a finder of the single number of an entry."""
    return lambda entry, _: [("", entry[key], entry["others"])]


def of_scenes(key):
    """Return a finder of the number of each scene that has it."""
    return lambda scenes, _: [
        (scene["words"], scene[key], scene["others"]) for scene in scenes.values() if key in scene
    ]


def copies(index):
    """Return a finder of the copies of each scene at one of the ranges."""

    def find(scenes, sizes):
        reach = sizes.ranges[index]
        return [
            (scene["words"], point["copies"], scene["others"])
            for scene in scenes.values()
            for point in scene["points"]
            if point["range"] == reach
        ]

    return find


MAP = "map, whole process, {side} x {side}"
ASKED = (
    Asked(
        "walker", "visible, {walk_range} cells, rough hills", "walk", 60, 150, " x",
        one("ratio"), least=True, places=0,
    ),
    Asked("scenes", "visible, {first} cells", "copy", 60, 25, " x", copies(0), places=1),
    Asked("scenes", "visible, {second} cells", "copy", 60, 25, " x", copies(1), places=1),
    Asked("scenes", "with clearance", "without", 2.5, 1.3, " x", of_scenes("clearance")),
    Asked(
        "scenes", "a cell at {last} cells", "at {first}", 1.15, 1.0, " x",
        of_scenes("growth"),
    ),
    Asked(
        "scenes", "one thread", "two threads", 1.8, 1.95, " x", of_scenes("gain"), least=True,
    ),
    Asked("scenes", "largest piece of work", "all", 1 / 64, None, "", of_scenes("piece"), places=4),
    Asked("process", MAP, "read, hash, write", 2.0, 1.4, " x", one("map")),
    Asked("process", "the same in degrees", "projected", 1.5, 1.1, " x", one("geographic")),
    Asked("process", "its memory a cell", "map of 65 x 65", 10, 6, " B", one("bytes"), places=1),
    Asked("process", "with polygons and page", "without", 2.5, 1.5, " x", one("drawn")),
    Asked(
        "observers", "count of {observers}, {observer_range} cells", "engine runs", 1.15, 1.0,
        " x", one("ratio"),
    ),
    Asked(
        "start", "viewshed --help", "empty process", 150, None, " ms", one("help"), places=0,
        always=True,
    ),
    Asked(
        "start", "import viewshed", "empty process", 40, None, " ms", one("import"), places=0,
        always=True,
    ),
    Asked(
        "sample", "map of the sample, one observer", "imports", 2.0, 1.3, " x", one("one"),
        always=True,
    ),
    Asked(
        "sample", "the same, 8 and polygons", "imports", 2.0, 1.3, " x", one("turbines"),
        always=True,
    ),
    Asked(
        "agreement", "wrong answers", "of {asked:,}", 0, None, "", one("unlike"), places=0,
        always=True,
    ),
)  # fmt: skip


def agreement(checks):
    """Sum of the checks: (asked, unlike) by name."""
    asked, unlike = (sum(values) for values in zip(*checks.values(), strict=True))
    return {"asked": asked, "unlike": unlike, "others": 0.0, "checks": checks}


def rows_of(found, sizes):
    """One row for each figure that was measured.

    Parameters
    ----------
    found : dict
        What was measured, by group.
    sizes : Sizes
        At which sizes; at others than the full ones nothing is asked of most figures.

    Returns
    -------
    list of dict
        `what`, `yardstick`, `worst` (the scene that counts), `got`, `must`, `met`, `aim`,
        `reached`, and `texts` of `got`, `must` and `aim`. `met` is "NO?" where other processes
        had a part in it.
    """
    rows = []
    first, second = sizes.ranges
    named = vars(sizes) | {"first": first, "second": second, "last": sizes.curve[-1]}
    for asked in ASKED:
        if asked.group not in found:
            continue
        entry = found[asked.group]
        candidates = [found for found in asked.find(entry, sizes) if found[1] is not None]
        names = named | (entry if asked.group == "agreement" else {})
        row = {
            "what": asked.what.format(**names),
            "yardstick": asked.yardstick.format(**names),
            "worst": "",
            "got": None,
            "must": asked.must,
            "met": "",
            "aim": asked.aim,
            "reached": "",
            "texts": ("-", *(_limit(asked, limit) for limit in (asked.must, asked.aim))),
        }
        if candidates:
            worst = (min if asked.least else max)(candidates, key=lambda found: found[1])
            text = f"{worst[1]:.{asked.places}f}{asked.unit}"
            row |= {"worst": worst[0], "got": worst[1], "texts": (text, *row["texts"][1:])}
            if sizes.full or asked.always:
                doubt = "NO?" if worst[2] > CALM else "NO"
                row["met"] = "yes" if _good(asked, worst[1], asked.must) else doubt
                if asked.aim is not None:
                    row["reached"] = "yes" if _good(asked, worst[1], asked.aim) else "no"
        rows.append(row)
    return rows


def _good(asked, value, limit):
    return value >= limit if asked.least else value <= limit


def _limit(asked, value):
    if value is None:
        return ""
    text = "1/64" if value == 1 / 64 else f"{value:g}"
    return f"{'>=' if asked.least else '<='} {text}{asked.unit}"
