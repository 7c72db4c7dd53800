"""The picture of cost: time a cell against range, between copying the grid and walking."""

import math

import numpy as np

SIZE, DPI = (9.0, 6.2), 150
#: Colours by turns, of clearly different lightness, never red beside green.
INKS = (
    "#1b3a6b", "#d9822b", "#5d5d5d", "#3f8fc4", "#7a4a12", "#9467ae", "#000000", "#b39b2e",
)  # fmt: skip
STYLES = ("-", "--", "-.", (0, (1, 1.2)))
MARKS = "osD^vPXh"
GREY = "#777777"
#: Room that a label takes, of the height of the axes.
LABEL_STEP = 0.032


def spread(places, step):
    """Move places apart until neighbours are a step from each other, and keep their order.

    Parameters
    ----------
    places : list of float
        Wanted places.
    step : float
        Least distance.

    Returns
    -------
    list of float
        Places in the order given; groups that touch stay about their middle.
    """
    order = sorted(range(len(places)), key=lambda n: places[n])
    groups = []  # (middle, members)
    for n in order:
        groups.append((places[n], [n]))
        while len(groups) > 1:
            (low, below), (high, above) = groups[-2:]
            if high - low >= 0.5 * step * (len(below) + len(above)):
                break
            size = len(below) + len(above)
            groups[-2:] = [((low * len(below) + high * len(above)) / size, below + above)]
    found = [0.0] * len(places)
    for middle, members in groups:
        for k, n in enumerate(members):
            found[n] = middle + step * (k - 0.5 * (len(members) - 1))
    return found


def lines_of(found):
    """Curves by label: ranges [cells] and times [ns a cell]; the copy and the walker last."""
    kinds = [scene for scene in found["scenes"].values() if "growth" in scene]
    lines = {
        scene["words"]: [(point["range"], point["ns"]) for point in scene["points"]]
        for scene in kinds
    }
    copies = {}
    for scene in kinds:
        for point in scene["points"]:
            copies.setdefault(point["range"], []).append(point["copy"])
    lines["copy of the grid"] = [(reach, float(np.median(ns))) for reach, ns in copies.items()]
    lines["walk of every line"] = [
        (point["range"], point["ns"]) for point in found["walker"]["curve"]
    ]
    return {label: np.array(sorted(points)).T for label, points in lines.items()}


def draw(found, path):
    """Draw the picture.

    Parameters
    ----------
    found : dict
        What was measured; the groups `scenes` and `walker` are needed.
    path : path
        PNG to write.
    """
    from matplotlib.backends.backend_agg import FigureCanvasAgg  # noqa: PLC0415
    from matplotlib.figure import Figure  # noqa: PLC0415

    lines = lines_of(found)
    figure = Figure(figsize=SIZE, dpi=DPI)
    FigureCanvasAgg(figure)
    axes = figure.add_axes((0.085, 0.1, 0.64, 0.8))
    axes.set_xscale("log")
    axes.set_yscale("log")
    for n, (label, (ranges, ns)) in enumerate(lines.items()):
        edge = label.startswith(("copy", "walk"))
        ink = GREY if edge else INKS[n % len(INKS)]
        axes.plot(
            ranges,
            ns,
            color=ink,
            linewidth=2.6 if edge else 1.3,
            linestyle="-" if edge else STYLES[n % len(STYLES)],
            marker="" if edge else MARKS[n % len(MARKS)],
            markersize=4.5,
            zorder=2 if edge else 3,
        )
    top = max(ns.max() for _, ns in lines.values())
    low = min(ns.min() for _, ns in lines.values())
    axes.set_ylim(low / 1.6, top * 1.6)
    axes.grid(visible=True, which="major", color="#dddddd", linewidth=0.7)
    axes.set_axisbelow(True)
    axes.spines[["top", "right"]].set_visible(False)
    reaches = sorted({int(r) for ranges, _ in lines.values() for r in ranges})
    axes.set_xticks(reaches, [f"{reach:,}" for reach in reaches], fontsize=8)
    axes.minorticks_off()
    axes.yaxis.set_major_formatter(lambda value, _: f"{value:g}")
    axes.set_xlabel("range [cells]")
    axes.set_ylabel("time a cell answered [ns], two threads (copy: one)")
    figure.text(
        0.085, 0.94, "What a cell costs: between copying the grid and walking every sight line",
        fontsize=11, weight="bold",
    )  # fmt: skip
    label_ends(axes, lines)
    figure.savefig(path, metadata={"Software": None})


def told(value):
    """Write a number with two digits that count, and no power of ten."""
    return f"{value:.{max(0, 1 - math.floor(math.log10(value)))}f}"


def label_ends(axes, lines):
    """Write the name of each line at its end, moved apart and led to it."""
    to_axes = axes.transScale + axes.transLimits
    ends = {label: (ranges[-1], ns[-1]) for label, (ranges, ns) in lines.items()}
    ends_at = {label: to_axes.transform(end) for label, end in ends.items()}
    heights = spread([float(at[1]) for at in ends_at.values()], LABEL_STEP)
    for n, ((label, at), height) in enumerate(zip(ends_at.items(), heights, strict=True)):
        edge = label.startswith(("copy", "walk"))
        ink = GREY if edge else INKS[n % len(INKS)]
        axes.annotate(
            f"{label}, {told(ends[label][1])} ns",
            xy=at,
            xytext=(1.04, height),
            xycoords="axes fraction",
            textcoords="axes fraction",
            fontsize=8.5,
            weight="bold" if edge else "normal",
            color="#222222",
            va="center",
            annotation_clip=False,
            arrowprops={
                "arrowstyle": "-",
                "color": ink,
                "linewidth": 0.6,
                "relpos": (0.0, 0.5),
                "shrinkA": 1,
                "shrinkB": 4,
            },
        )
