"""Draw the pictures of the README and the docs: ``python docs/make_pictures.py``. Needs the ``test`` extra.

The head is the invented one of the demo; nothing here is anybody's anatomy.
"""

from __future__ import annotations

from pathlib import Path

import matplotlib as mpl
import numpy as np

mpl.use("Agg")
import matplotlib.pyplot as plt
from coilwright.geometry.files import Inputs
from coilwright.runner.planning import Planned, plan_poses
from coilwright.runner.sources import read_source
from matplotlib.collections import PolyCollection

HERE = Path(__file__).parent
DEMO = HERE.parent / "protocols" / "demo" / "protocol.yaml"
# View: horizontal axis, vertical axis, towards the viewer, their labels.
VIEWS = {
    "from the left": ((0, -1, 0), (0, 0, 1), (-1, 0, 0), ("A", "P", "I", "S")),
    "from above": ((1, 0, 0), (0, 1, 0), (0, 0, 1), ("L", "R", "P", "A")),
}
LEFT_FACE = {"reached": "#0072b2", "left out": "#d55e00"}  # colours that colour-blind readers tell apart


def outline(planned: Planned) -> np.ndarray:
    """The rim of the coil's contact face, coil frame, shape (K, 3)."""
    from scipy.spatial import ConvexHull

    corners = np.concatenate([s.outline.vertices[:, :2] for s in planned.source.coil.solids[:-1]])
    rim = corners[ConvexHull(corners).vertices]
    return np.column_stack([rim, np.zeros(len(rim))])


def draw(axes: plt.Axes, planned: Planned, view: str, names: list[str]) -> None:
    """Scalp, targets, contact faces and the direction of the field, seen from one side."""
    right, up, towards, letters = (np.array(v) if i < 3 else v for i, v in enumerate(VIEWS[view]))
    scalp = planned.head.scalp
    facing = scalp.face_normals @ towards > 0
    flat = np.stack([scalp.triangles @ right, scalp.triangles @ up], axis=-1)[facing]
    shade = 0.75 + 0.22 * (scalp.face_normals[facing] @ (towards + 0.5 * up) / 1.12)
    order = np.argsort((scalp.triangles[facing] @ towards).mean(axis=1))
    axes.add_collection(
        PolyCollection(flat[order], facecolors=[str(min(s, 1)) for s in shade[order]], edgecolors="none")
    )
    rim = outline(planned)
    for name in names:
        i = planned.poses.names.index(name)
        matrix, reached = planned.poses.pose.matrix[i], planned.reachable[i]
        colour = LEFT_FACE["reached" if reached else "left out"]
        points = rim @ matrix[:3, :3].T + matrix[:3, 3]
        loop = np.vstack([points, points[:1]])
        axes.plot(loop @ right, loop @ up, color=colour, lw=1.4, ls="-" if reached else "--")
        tail, tip = matrix[:3, 3], matrix[:3, 3] + 34 * matrix[:3, 0]
        axes.annotate(
            "",
            (tip @ right, tip @ up),
            (tail @ right, tail @ up),
            arrowprops={"arrowstyle": "->", "color": colour, "lw": 2},
        )
        axes.annotate(
            name, (tail @ right, tail @ up), textcoords="offset points", xytext=(6, -10), fontsize=8, color="black"
        )
    low, high = 122, 132
    for (x, y), letter in zip(((-high, 0), (high, 0), (0, -high), (0, high)), letters, strict=True):
        axes.text(x, y, letter, ha="center", va="center", fontsize=15, weight="bold")
    axes.set(xlim=(-low - 22, low + 22), ylim=(-low - 22, low + 22), aspect="equal", title=view)
    axes.axis("off")


def main() -> None:
    """Write docs/pictures/demo.png."""
    inputs = Inputs()
    planned = plan_poses(read_source(DEMO, inputs), inputs)
    figure, axes = plt.subplots(1, 2, figsize=(10, 5.2), layout="constrained")
    draw(axes[0], planned, "from the left", ["index", "behind the ear"])
    draw(axes[1], planned, "from above", ["index", "premotor", "right index"])
    figure.suptitle(
        "Demo head (invented): contact faces of the coil, arrows along the induced field;\n"
        "solid: can be reached, dashed: left out, it would enter the keep-out around the ear",
        fontsize=10,
    )
    figure.savefig(HERE / "pictures" / "demo.png", dpi=110)
    print("wrote docs/pictures/demo.png")


if __name__ == "__main__":
    main()
