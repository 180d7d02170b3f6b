"""Make the sample meshes of this folder with netgen; run ``python meshes/make_samples.py``.

All coordinates are in µm; 2-D meshes lie in the x–z plane. Names, sizes and what each one shows: README.md.
"""

from __future__ import annotations

import sys
from collections.abc import Callable
from pathlib import Path

import meshio
import numpy as np
from netgen.geom2d import SplineGeometry
from netgen.occ import Axes, Box, Cylinder, Glue, OCCGeometry, Pnt, WorkPlane, X, Z

HERE = Path(__file__).parent
FACET = {"triangle": "line", "tetra": "triangle"}


def section(corners: list[tuple[float, float, float]], names: list[str | None], largest_um: float) -> meshio.Mesh:
    """Triangles in a polygon, counter-clockwise: corners with mesh sizes; names[i] is the side after corner i."""
    shape = SplineGeometry()
    nodes = [shape.AppendPoint(x, z, size) for x, z, size in corners]
    for i, name in enumerate(names):
        ends = nodes[i], nodes[(i + 1) % len(nodes)]
        shape.Append(["line", *ends], leftdomain=1, rightdomain=0, bc=name or "symmetry")
    made = shape.GenerateMesh(maxh=largest_um, grading=0.35)
    points = np.array([p.p for p in made.Points()])[:, [0, 2, 1]]
    lines, sides = _numbers(made.Elements1D()), [e.index - 1 for e in made.Elements1D()]
    return tagged(points, "triangle", _numbers(made.Elements2D()), lines, [names[side] for side in sides])


def solid(shape: object, name_of: Callable[[np.ndarray], str | None], largest_um: float) -> meshio.Mesh:
    """Tets in a solid; name_of(centre of a boundary triangle)."""
    made = OCCGeometry(shape).GenerateMesh(maxh=largest_um, grading=0.6)
    points = np.array([p.p for p in made.Points()])
    facets = _numbers(made.Elements2D())
    return tagged(
        points, "tetra", _numbers(made.Elements3D()), facets, [name_of(c) for c in points[facets].mean(axis=1)]
    )


def _numbers(elements: object) -> np.ndarray:
    return np.array([[v.nr - 1 for v in e.vertices] for e in elements])


def tagged(
    points: np.ndarray, kind: str, cells: np.ndarray, facets: np.ndarray, names: list[str | None]
) -> meshio.Mesh:
    """Mesh with physical groups: one block per named surface and one volume "base"; unnamed facets are left out."""
    dimension = points.shape[1] if kind == "tetra" else 2
    groups = sorted({name for name in names if name})
    blocks = [(FACET[kind], facets[[name == group for name in names]]) for group in groups] + [(kind, cells)]
    tags = [np.full(len(nodes), tag) for tag, (_, nodes) in enumerate(blocks, 1)]
    fields = {name: np.array([tag, dimension - 1]) for tag, name in enumerate(groups, 1)}
    fields["base"] = np.array([len(blocks), dimension])
    where = np.tile([dimension, len(blocks)], (len(points), 1))  # the entity of each node, which MSH 4.1 wants
    for tag, (_, nodes) in enumerate(blocks[:-1], 1):
        where[nodes] = dimension - 1, tag
    return meshio.Mesh(
        np.round(points, 6) + 0.0,
        blocks,
        point_data={"gmsh:dim_tags": where},
        cell_data={"gmsh:physical": tags, "gmsh:geometrical": [t.copy() for t in tags]},
        field_data=fields,
    )


def finger_cell() -> meshio.Mesh:
    """Half a period across a finger."""
    corners = [(0, 0, 30), (600, 0, 40), (600, 180, 40), (25, 180, 0.5), (0, 180, 8)]
    return section(corners, ["rear", None, "front_passivated", "front_finger", None], 45)


def u_junction() -> meshio.Mesh:
    """Junction on the front, down the left side and along the rear to x = 80; metal on the rear from x = 200."""
    corners = [(0, 0, 8), (80, 0, 1), (200, 0, 1), (400, 0, 25), (400, 180, 25), (0, 180, 15)]
    return section(corners, ["junction", "passivated", "metal", None, "junction", "junction"], 30)


def finger_over_dot() -> meshio.Mesh:
    """Finger along y on the front over a quarter of a round opening on the rear."""
    block = Box(Pnt(0, 0, 0), Pnt(300, 300, 150))
    finger = WorkPlane(Axes((0, 0, 150), n=Z, h=X)).Rectangle(20, 300).Face()
    opening = Cylinder(Pnt(0, 0, 0), Z, r=40, h=10).faces.Min(Z) * Box(Pnt(0, 0, -1), Pnt(300, 300, 1))
    shape = Glue([block, finger, opening])
    for edge in shape.edges:
        centre = edge.center
        if abs(centre.x - 20) < 1e-6:
            edge.maxh = 14
        elif abs(centre.z) < 1e-6 and np.hypot(centre.x, centre.y) < 41:
            edge.maxh = 6

    def name_of(centre: np.ndarray) -> str | None:
        x, y, z = centre
        if abs(z - 150) < 1e-6:
            return "front_finger" if x < 20 else "front_passivated"
        return ("rear_dot" if np.hypot(x, y) < 40 else "rear_passivated") if abs(z) < 1e-6 else None

    return solid(shape, name_of, 60)


def oblique_edge() -> meshio.Mesh:
    """Contact on the front whose edge runs from (80, 0) to (40, 150)."""
    block = Box(Pnt(0, 0, 0), Pnt(200, 150, 100))
    plane = WorkPlane(Axes((0, 0, 100), n=Z, h=X))
    contact = plane.MoveTo(0, 0).LineTo(80, 0).LineTo(40, 150).LineTo(0, 150).Close().Face()
    shape = Glue([block, contact])
    for edge in shape.edges:
        if abs(edge.center.x - 60) < 1e-6 and abs(edge.center.z - 100) < 1e-6:
            edge.maxh = 8

    def name_of(centre: np.ndarray) -> str | None:
        x, y, z = centre
        if abs(z - 100) < 1e-6:
            return "contact" if x < 80 - 40 * y / 150 else "front_passivated"
        return "rear" if abs(z) < 1e-6 else None

    return solid(shape, name_of, 45)


def write_msh(mesh: meshio.Mesh, path: Path, version: str) -> None:
    """Text MSH with nine digits."""
    meshio.gmsh.write(path, mesh, fmt_version=version, binary=False, float_fmt=".9g")


def main(folder: Path) -> None:
    """Write all samples."""
    folder.mkdir(parents=True, exist_ok=True)
    write_msh(finger_cell(), folder / "finger_cell_2d.msh", "2.2")
    write_msh(u_junction(), folder / "u_junction_2d.msh", "4.1")
    write_msh(finger_over_dot(), folder / "finger_over_dot_3d.msh", "2.2")
    oblique = oblique_edge()
    write_msh(oblique, folder / "oblique_edge_3d.msh", "2.2")
    plain = meshio.Mesh(oblique.points, oblique.cells, cell_data={"tag": oblique.cell_data["gmsh:physical"]})
    meshio.vtu.write(folder / "oblique_edge_3d.vtu", plain, binary=True, compression="zlib")


if __name__ == "__main__":
    main(Path(sys.argv[1]) if len(sys.argv) > 1 else HERE)
