"""Make the demo survey Marrowby Field again, byte for byte (same machine type and numpy version).

    python grids/marrowby/make.py            # writes beside this file
    python grids/marrowby/make.py --into DIR
    python grids/marrowby/make.py --measure  # also prints contrast and AUC of the walls (benchmarks/reference_chain.py)

The site is invented: no such field was surveyed.
"""

from __future__ import annotations

import argparse
import json
import math
import runpy
from collections.abc import Collection
from pathlib import Path

import numpy as np

from planum.records import Similarity
from planum.synthetic.folder import Layout, Site, Written, write_survey
from planum.synthetic.modelling import Ground
from planum.synthetic.recording import Faults, Noise, Radar
from planum.synthetic.scene import Ditch, Floor, Gravel, Layer, Pipe, Roots, Scene, Stone, Stones, Wall, box, disc

SEED = 20260418
HERE = Path(__file__).resolve().parent
TOP_SLICE_M = (0.45, 0.55)
"""The slice that begins at the walls' top."""


def building() -> tuple[Wall, ...]:
    """Return the outer walls of 8 m x 6 m at 25 degrees with a doorway, and a partition."""
    cos, sin = math.cos(math.radians(25.0)), math.sin(math.radians(25.0))

    def at(u: float, w: float) -> tuple[float, float]:
        return round(7.3 + u * cos - w * sin, 4), round(3.3 + u * sin + w * cos, 4)

    outer = Wall(
        "outer wall",
        (at(0, 0), at(8, 0), at(8, 6), at(0, 6), at(0, 0)),
        0.60,
        0.45,
        1.00,
        0.145,
        body=1.0,
        openings=((2.6, 3.7),),
    )
    partition = Wall("partition", (at(5, 0.3), at(5, 5.7)), 0.50, 0.47, 0.95, 0.145, body=1.0, openings=((3.4, 4.3),))
    return outer, partition


def scene() -> Scene:
    """Return everything in the ground."""
    around = box(-2.0, -2.0, 22.0, 18.0)
    return Scene(
        (
            *building(),
            Ditch("ditch", ((-1.0, 12.2), (6.0, 15.0), (9.5, 17.5)), 2.2, 0.40, 1.25, 0.12),
            Pipe("pipe", ((15.2, -1.0), (19.6, 10.5)), 0.80, 0.10, 0.035),
            Floor("hearth", disc(9.3, 7.2, 0.45), 0.55, 0.10, 0.4, kind="hearth"),
            Floor("floor", ((8.6, 4.6), (10.7, 5.6), (9.6, 8.0), (7.4, 7.0)), 0.72, 0.05, 0.10),
            *(
                Stone(f"stone {i}", x, y, z, q)
                for i, (x, y, z, q) in enumerate(
                    (
                        (2.00, 2.00, 0.50, 0.012),
                        (4.20, 7.75, 0.70, 0.016),
                        (17.20, 14.00, 0.60, 0.014),
                        (1.60, 10.25, 0.90, 0.022),
                        (13.50, 14.25, 0.40, 0.009),
                        (12.40, 1.00, 0.80, 0.019),
                    ),
                    start=1,
                )
            ),
            Roots("roots", 18.6, 13.2),
            Gravel("gravel", ((0.8, 4.2), (2.6, 3.8), (3.2, 5.2), (1.4, 6.0)), 0.30, 0.55, 0.0035),
            Layer("plough soil", around, 0.28, 0.025, 3.0, 0.04),
            Stones("small stones", around, 26000, 0.12, 1.7, 0.0028),
        ),
        Ground(velocity_m_per_ns=0.0875, loss_db_per_m=7.0),
    )


def layout() -> Layout:
    """Return the one grid, with what went wrong in the field."""
    faults = Faults(
        missing=(38,),
        pieces={11: ((0.0, 3.4), (4.9, 20.0))},
        dead={23: ((150, 2),), 52: ((301, 1),)},
        gain_db=0.4,
        zero_drift_ns=0.15,
    )
    return Layout("A", 20.0, 16.0, 0.25, 0.05, radar=Radar(), noise=Noise(), faults=faults)


def site() -> Site:
    """Return title, place on the map and slices."""
    turn = math.radians(17.0)
    return Site(
        title="Marrowby Field, season 1",
        code="MBF1",
        crs="EPSG:25832",
        frame=Similarity(a=math.cos(turn), b=math.sin(turn), e0=566412.37, n0=5934187.62),
        control_scatter_m=0.012,
        conditions="short grass, dry for ten days",
        slices={"top_m": 0.0, "bottom_m": 1.6, "thickness_m": 0.1, "step_m": 0.05},
        about=("Marrowby Field is invented: see README.md. make.py writes all of this.",),
    )


def make(folder: Path, *, only: Collection[int] | None = None) -> Written:
    """Write the survey into ``folder``; with ``only``, record these lines alone."""
    return write_survey(folder, scene(), layout(), seed=SEED, site=site(), only=only)


def measure(folder: Path) -> tuple[float, float]:
    """Contrast of the walls in their top slice (dB), AUC of the mean from their top to their base."""
    path = HERE.parents[1] / "benchmarks" / "reference_chain.py"
    if not path.is_file():
        raise SystemExit("benchmarks/reference_chain.py is not there: measuring needs the whole repository")
    chain = runpy.run_path(str(path))
    walls = building()
    body = (min(w.top_m for w in walls), max(w.base_m for w in walls))
    truth = json.loads((folder / "truth" / "features.geojson").read_text())
    stack, x, y = chain["depth_slices"](
        folder, velocity=scene().ground.velocity_m_per_ns, intervals=np.array([TOP_SLICE_M, body])
    )
    contrast, auc = chain["judge"](stack, x, y, truth)
    return float(contrast[0]), float(auc[1])


def main() -> None:
    """Write the folder and print what the walls look like."""
    parser = argparse.ArgumentParser(description=__doc__.splitlines()[0])
    parser.add_argument("--into", type=Path, default=HERE)
    parser.add_argument("--measure", action="store_true")
    asked = parser.parse_args()
    written = make(asked.into)
    size = sum(p.stat().st_size for p in asked.into.rglob("*") if p.is_file())
    print(f"{len(written.files)} line files, {size / 1e6:.2f} MB in {asked.into}")
    if asked.measure:
        contrast, auc = measure(asked.into)
        print(f"walls {TOP_SLICE_M[0]:.2f} to {TOP_SLICE_M[1]:.2f} m: contrast {contrast:.2f} dB")
        print(f"walls, mean from top to base: AUC {auc:.4f}")


if __name__ == "__main__":
    main()
