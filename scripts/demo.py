"""Run the main job on the sample terrain, from nothing but Python 3.11 or newer.

    python3 scripts/demo.py

The first run makes an environment in the tree, which needs the network; later runs do not.
"""

import argparse
import json
import subprocess
import sys
import time

from _environment import ROOT, clean_environ, command, prepare, run

DEM = ROOT / "sample_dem" / "elevation.tif"
#: Eight turbines of 150 m; people of 1.7 m look at their tips, so the tips are the observers.
OBSERVERS = str(ROOT / "sample_dem" / "places.gpkg:turbines")
OUT = ROOT / "demo_output"
LAYERS = "visible,count,needed-height"


def summary(record, seconds):
    """Return the rows of the table that ends the demonstration.

    Parameters
    ----------
    record : dict
        What record.json holds.
    seconds : float
        Time the command took [s].

    Returns
    -------
    list of tuple of str
        (what, value).
    """
    rows = [
        (state + " ground", "{:,.1f} km2".format(record["areas_m2"][state] / 1e6))
        for state in ("visible", "hidden", "unresolved")
    ]
    farthest = record["farthest_visible"]
    if farthest is None:
        rows.append(("farthest visible point", "none"))
    else:
        place = "{:.2f} km from {}, bearing {:05.1f}".format(
            farthest["distance_m"] / 1000, farthest["observer"], farthest["bearing_deg"]
        )
        rows.append(("farthest visible point", place))
    air = record["refraction"]
    rows.append(("refraction", "k = {:.4g} (K = {:.4g})".format(air["k"], air["K"])))
    rows.append(("time taken", f"{seconds:.1f} s"))
    return rows


def main():
    """Map from where the turbines are seen and say what came out."""
    argparse.ArgumentParser(description=__doc__.splitlines()[0]).parse_args()
    python = prepare("run")
    words = [str(command(python, "viewshed")), "map", str(DEM), "--observers", OBSERVERS]
    words += ["--target-height", "1.7", "--layers", LAYERS, "--polygons", "gpkg"]
    words += ["--out", str(OUT), "--overwrite"]
    began = time.monotonic()
    code = subprocess.run(words, env=clean_environ(), stdout=sys.stderr, check=False).returncode
    if code:
        return code
    seconds = time.monotonic() - began
    record = json.loads((OUT / "record.json").read_text(encoding="utf-8"))
    print(record["question"])
    for what, value in summary(record, seconds):
        print(f"  {what:<24}{value}")
    names = sorted([*record["outputs"], "record.json"], key=lambda name: name != "map.png")
    print("written:")
    for name in names:
        print(f"  {OUT / name}")
    return 0


if __name__ == "__main__":
    run(main)
