"""The tables, as text and for the README."""

from _bench_asked import rows_of
from _bench_common import CALM, THREADS, K

#: Between these lines of the README the tables stand.
BEGIN, END = "<!-- figures of scripts/bench.py -->", "<!-- end of figures -->"
NOTES = """\
copy: np.copyto of the same float32 grid, one thread, median of {copies}. copies: ns over that.
ns: wall time a cell answered, {threads} threads, median of {turns}. growth: ns at the longest range
over ns at {first} cells. clear: with clearance over without. gain: one thread over {threads}.
piece: largest piece of work over all. Walkers answer some rows; the bounded ones look at the
highest post of a strip first and are no plain walks, so no yardstick. Target height 0, k = {k};
cells of 30 m, of the city 5 m. A terrain named in the first table is the worst of all."""
ASKED_HEADS = ("what", "against", "got", "must", "ok", "aim", "ok")


def asked_cells(row):
    """Texts of one row of the first table."""
    what = row["what"] + (f": {row['worst']}" if row["worst"] else "")
    got, must, aim = row["texts"]
    return what, row["yardstick"], got, must, row["met"], aim, row["reached"]


def beyond(sizes):
    """Whether kinds of terrain are seen farther than all scenes."""
    return sizes.curve[-1] not in sizes.ranges


def scene_cells(scene, sizes):
    """Texts of one row of the table of terrains."""
    points = {point["range"]: point for point in scene["points"]}
    cells = [scene["words"], f"{scene['eye']:g}", f"{scene['seen']:.1f}"]
    for reach in sizes.ranges:
        cells += [f"{points[reach]['ns']:.1f}", f"{points[reach]['copies']:.1f}"]
    if beyond(sizes):
        last = points.get(sizes.curve[-1])
        cells.append(f"{last['ns']:.1f}" if last else "")
    cells.append(f"{scene['growth']:.2f}" if "growth" in scene else "")
    cells += [f"{scene[key]:.2f}" for key in ("clearance", "gain")]
    return [*cells, f"1/{1.0 / scene['piece']:.0f}"]


def scene_heads(sizes):
    """Heads of the table of terrains."""
    ranges = [head for reach in sizes.ranges for head in (f"ns {reach}", "copies")]
    last = [f"ns {sizes.curve[-1]}"] if beyond(sizes) else []
    return ["terrain", "eye m", "seen %", *ranges, *last, "growth", "clear", "gain", "piece"]


def walker_lines(walker):
    """Lines of the engine beside the walkers."""
    copy = walker["copy"]
    ways = {"engine": walker["ns"]}
    ways |= {f"walker {name}": way["ns"] for name, way in walker["walkers"].items()}
    ways["copy"] = copy
    cells = [(name, f"{ns:.1f}", f"{ns / copy:.0f}") for name, ns in ways.items()]
    return columns((f"rough hills, {walker['range']} cells", "ns", "copies"), cells)


def process_lines(group, took):
    """Lines of what whole processes took."""

    def cells(name, one):
        busy = "-" if one["busy"] is None else f"{one['busy']:.2f}"
        peak = "-" if one["peak"] is None else f"{one['peak'] / 1e6:.0f}"
        return name, f"{one['seconds']:.3f}", busy, peak

    heads = (f"processes: {group}", "wall s", "busy s", "peak MB")
    return columns(heads, [cells(name, one) for name, one in took.items()])


def columns(heads, lines):
    """Lines of a table in columns, the first to the left and numbers to the right."""
    table = [[str(cell) for cell in line] for line in (heads, *lines)]
    widths = [max(len(line[n]) for line in table) for n in range(len(heads))]
    return [
        "  ".join(
            cell.rjust(width) if n else cell.ljust(width)
            for n, (cell, width) in enumerate(zip(line, widths, strict=True))
        ).rstrip()
        for line in table
    ]


def shares_of(found):
    """Shares of the machine that other processes took."""
    entries = [entry for group, entry in found.items() if group != "scenes"]
    entries += found.get("scenes", {}).values()
    return [entry["others"] for entry in entries]


def printed(found, sizes, host):
    """Lines to print."""
    size = "full sizes" if sizes.full else "small sizes, of which little is asked"
    lines = [
        f"viewshed {host['viewshed']}, {size}: {host['cpu']}, {host['cores']} cores; Python "
        f"{host['python']}, numpy {host['numpy']},",
        f"numba {host['numba']}; load average before it {host['load']}",
        "",
        *columns(ASKED_HEADS, [asked_cells(row) for row in rows_of(found, sizes)]),
    ]
    if "scenes" in found:
        scenes = [scene_cells(scene, sizes) for scene in found["scenes"].values()]
        lines += ["", *columns(scene_heads(sizes), scenes)]
    if "walker" in found:
        lines += ["", *walker_lines(found["walker"])]
    for group in ("process", "start", "sample"):
        if group in found:
            lines += ["", *process_lines(group, found[group]["took"])]
    most = 100.0 * max(shares_of(found), default=0.0)
    lines += [
        "",
        f"Other processes took up to {most:.0f} % of the processors; above {100 * CALM:.0f} % a NO "
        "is doubted (NO?).",
    ]
    turns, first = sizes.turns, sizes.ranges[0]
    notes = NOTES.format(turns=turns, copies=turns + 2, threads=THREADS, first=first, k=K)
    return [*lines, notes]


def marked_down(heads, lines):
    """Lines of a table in Markdown."""
    table = [heads, ["---"] + ["---:"] * (len(heads) - 1), *lines]
    return ["| " + " | ".join(map(str, line)) + " |" for line in table]


def readme_lines(found, sizes, host):
    """Lines of the README: terrains, and each figure against its yardstick."""
    first, last = sizes.ranges[0], sizes.curve[-1]
    copy = min(
        point["copy"]
        for scene in found["scenes"].values()
        for point in scene["points"]
        if point["range"] == first
    )
    terrain = []
    for scene in found["scenes"].values():
        points = {point["range"]: point for point in scene["points"]}
        cells = [f"{points[r]['ns']:.1f}" if r in points else "" for r in (*sizes.ranges, last)]
        clear = points[first]["ns"] * scene["clearance"]
        terrain.append([scene["words"], *cells, f"{clear:.1f}", f"{points[first]['copies']:.0f}"])
    heads = ["terrain", *(f"{reach:,} cells" for reach in (*sizes.ranges, last))]
    heads += [f"with clearance, {first:,}", f"copies, {first:,}"]
    asked = [
        (what, against, got, must)
        for what, against, got, must, *_ in (asked_cells(row) for row in rows_of(found, sizes))
    ]
    return [
        BEGIN,
        "",
        f"Nanoseconds a cell answered, by range, on {THREADS} threads of {host['cpu']}, kernels",
        f"compiled; copying the same grid in memory costs {copy:.2f}.",
        "",
        *marked_down(heads, terrain),
        "",
        "Each figure against its yardstick, measured in the same run; where a terrain is named, it",
        "is the worst of all:",
        "",
        *marked_down(("what", "against", "measured", "wanted"), asked),
        "",
        END,
    ]


def write_readme(path, lines):
    """Put the tables in their place in the README.

    Raises
    ------
    SystemExit
        If the place is not marked.
    """
    text = path.read_text(encoding="utf-8")
    begin, end = text.find(BEGIN), text.find(END)
    if not 0 <= begin < end:
        msg = f"{path} has no lines {BEGIN} and {END} between which the tables go; add them"
        raise SystemExit(msg)
    path.write_text(
        text[:begin] + "\n".join(lines) + text[end + len(END) :], encoding="utf-8"
    )
