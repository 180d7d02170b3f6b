"""Grain boundaries, cracks and outer edges: in built cells and in meshes from elsewhere."""

from __future__ import annotations

import dataclasses
import math

import numpy as np
import pytest
from simple_cells import box_mesh, constant_base, junction

import fem_carriers as fc
from fem_carriers.cell.inner import InnerSurface
from fem_carriers.studies.paths import changed, known_paths

SUN = fc.Light.sunlight(0.03)
Q = 1.602176634e-19
BASE = fc.Base("p", doping_per_cm3=1e16, thickness_um=150, lifetime_us=50)


def half(**changes):
    """Half a period of a full cell with a front finger and full rear metal."""
    layer = fc.DopedLayer("n", 100)
    front = fc.Face(fc.Surface(J0_fA_per_cm2=50, layer=layer), [fc.Strip("finger", 40, contact=fc.Contact("front", 2))])
    rear = fc.Surface(srv_cm_per_s=200, contact=fc.Contact("rear", 1))
    return fc.UnitCell(**{"base": BASE, "pitch_um": 800, "front": front, "rear": rear, "light": SUN} | changes)


def plane(position=200, srv=1e4, **changes):
    return {"grain_boundary": InnerSurface(x_um=position, srv_cm_per_s=srv, **changes)}


class TestGrainBoundary:
    @pytest.mark.parametrize("form", ["excess", "bipolar"])
    def test_on_a_line_of_symmetry_it_is_a_side_with_half_its_srv(self, form):
        """The periodic piece with a boundary in its middle between fingers is twice the half piece with S/2 there."""
        strip = fc.Strip("finger", 40, 400.0, contact=fc.Contact("front", 2))
        front = fc.Face(half().front.surface, [strip])
        whole = half(front=front, symmetry="periodic", inner=plane(0.0, 2e4))
        mirrored = half(front=front, sides={"x_min": fc.Surface(srv_cm_per_s=1e4)})
        if form == "excess":
            with pytest.warns(fc.ModelWarning):
                a, b = (fc.solve_excess(fc.problem(c, first_step_um=0.5)) for c in (whole, mirrored))
        else:
            a, b = (fc.solve_bipolar(fc.problem(c, first_step_um=0.5), 0.5) for c in (whole, mirrored))
        assert a.ledger.rows["surface", "grain_boundary"] == pytest.approx(b.ledger.rows["surface", "x_min"], rel=1e-4)
        collected = [s.collected_mA_per_cm2["front"] for s in (a, b)]
        assert collected[0] == pytest.approx(collected[1], rel=1e-5)

    def test_ledger_losses_and_tables_name_it(self):
        curve = fc.current_voltage(fc.problem(half(inner=plane())))
        without = fc.current_voltage(fc.problem(half()))
        assert curve.voc_V < without.voc_V - 0.005
        best = curve.maximum_power.solution
        assert best.losses.rows["surface", "grain_boundary"] > 0.1
        assert abs(best.losses.misclosure_mW_per_cm2) < 1e-9
        assert abs(best.ledger.relative_residual) < 1e-10

    def test_infinite_srv_fixes_the_density(self):
        dull = {"light": None, "front": fc.Surface(), "rear": fc.Surface(), "base": constant_base(30, 50.0)}
        problem = fc.problem(half(inner=plane(150, math.inf), **dull))
        lit = problem.changed(light=fc.Light.uniform(1e18))
        solution = fc.solve_excess(lit)
        assert solution.at([150.0, 75.0]) == pytest.approx(0, abs=1e-3)
        assert solution.ledger.rows["surface", "grain_boundary"] > 0
        field = fc.collection_probability(lit, "grain_boundary")
        assert field.collected_per_s * Q / lit.cell_area_cm2 * 1e3 == pytest.approx(
            solution.ledger.rows["surface", "grain_boundary"], rel=1e-9
        )

    def test_partial_depth(self):
        """A crack from the rear recombines less than one through the thickness, and ends where it is said to."""
        problem = fc.problem(half(inner=plane(to_z_um=60.0)))
        corners = problem.mesh.points_um[:, problem.mesh.cells.facets[:, problem.mesh.surfaces["grain_boundary"]]]
        assert np.ptp(corners[0]) < 1e-9
        assert corners[1].max() == pytest.approx(60)
        assert problem.mesh.surface_area_cm2("grain_boundary") == pytest.approx(60e-4)
        whole = fc.solve_bipolar(fc.problem(half(inner=plane())), 0.5)
        part = fc.solve_bipolar(problem, 0.5)
        key = ("surface", "grain_boundary")
        assert 0 < part.ledger.rows[key] < whole.ledger.rows[key]

    @pytest.mark.parametrize("dots", [False, True])
    def test_three_dimensions(self, dots):
        """Planes across x and y; on grids of boxes and on extruded triangles around dots."""
        contact = fc.Contact("front", 2)
        patch = fc.Dot("spot", 60, (0, 0), contact=contact) if dots else fc.Strip("finger", 40, contact=contact)
        inner = {
            "along_y": InnerSurface(x_um=150, srv_cm_per_s=1e3),
            "along_x": InnerSurface(y_um=60, srv_cm_per_s=1e3),
        }
        cell = half(pitch_y_um=300, front=fc.Face(half().front.surface, [patch]), inner=inner)
        problem = fc.problem(cell, first_step_um=12, order=1)
        assert problem.mesh.surface_area_cm2("along_y") == pytest.approx(150e-4 * 150e-4)
        assert problem.mesh.surface_area_cm2("along_x") == pytest.approx(400e-4 * 150e-4)
        fine = problem.mesh.refined()
        assert fine.surface_area_cm2("along_x") == pytest.approx(400e-4 * 150e-4)
        solution = fc.solve_bipolar(problem, 0.5)
        assert solution.ledger.rows["surface", "along_x"] > solution.ledger.rows["surface", "along_y"] > 0

    def test_same_in_two_and_three_dimensions(self):
        a = fc.solve_bipolar(fc.problem(half(inner=plane()), first_step_um=1.0), 0.5)
        b = fc.solve_bipolar(fc.problem(half(inner=plane(), pitch_y_um=40), first_step_um=1.0), 0.5)
        key = ("surface", "grain_boundary")
        assert a.ledger.rows[key] == pytest.approx(b.ledger.rows[key], rel=2e-3)

    def test_swept_like_any_input(self):
        cell = half(inner=plane())
        assert {"inner.grain_boundary.srv_cm_per_s", "inner.grain_boundary.x_um"} <= set(known_paths(cell))
        moved = changed(cell, {"inner.grain_boundary.x_um": 120, "inner.grain_boundary.J0_fA_per_cm2": 50})
        assert moved.inner["grain_boundary"] == InnerSurface(x_um=120, J0_fA_per_cm2=50)


class TestImported:
    def problem(self, **surface):
        mesh = box_mesh("quad", np.linspace(0, 100, 11), np.linspace(0, 60, 7))
        x = mesh.cells.p[0, mesh.cells.facets]
        inner = np.flatnonzero((np.abs(x - 40e-4) < 1e-9).all(axis=0))
        mesh = fc.Mesh(mesh.cells, dict(mesh.surfaces) | {"boundary": inner}, mesh.volumes)
        surfaces = {"z_max": junction(), "boundary": fc.Surface(**surface)}
        light = fc.Light.uniform(1e17)
        return fc.Problem(mesh, {"base": constant_base(30, 10.0)}, surfaces, light, cell_area_cm2=100e-4)

    def test_named_surface_inside_recombines(self):
        solution = fc.solve_excess(self.problem(srv_cm_per_s=1e4))
        assert solution.ledger.share("boundary") > 0.01
        assert abs(solution.ledger.relative_residual) < 1e-12

    def test_equals_the_built_cell(self):
        """The same grid, built and imported."""
        imported = fc.solve_excess(self.problem(srv_cm_per_s=1e4))
        base = constant_base(30, 10.0, thickness_um=60)
        inner = {"boundary": InnerSurface(x_um=40, srv_cm_per_s=1e4)}
        cell = fc.UnitCell(base, 200, front=junction(), light=fc.Light.uniform(1e17), inner=inner)
        built = fc.solve_excess(fc.problem(cell))
        for key in (("surface", "boundary"), ("terminal", "junction")):
            assert imported.ledger.rows[key] == pytest.approx(built.ledger.rows[key], rel=2e-3)

    def test_from_a_file(self, tmp_path):
        import meshio

        mesh = self.problem(srv_cm_per_s=1.0).mesh
        cells = [("quad", mesh.cells.t.T), ("line", mesh.cells.facets[:, mesh.surfaces["boundary"]].T)]
        tags = [np.ones(mesh.cells.t.shape[1], dtype=int), np.full(mesh.surfaces["boundary"].size, 2)]
        points = np.vstack([mesh.points_um[0], 0 * mesh.points_um[0], mesh.points_um[1]]).T
        meshio.Mesh(points, cells, cell_data={"tag": tags}).write(tmp_path / "grain.vtu")
        read = fc.read_mesh(tmp_path / "grain.vtu", length_unit="um", surfaces={"grain": 2}, volumes={"base": 1})
        light = fc.Light.uniform(1e17)
        surfaces = {"grain": fc.Surface(srv_cm_per_s=1e4)}
        problem = fc.Problem(read, {"base": constant_base(30, 10.0)}, surfaces, light, cell_area_cm2=100e-4)
        assert read.inner_share("grain") == 1
        assert fc.solve_excess(problem).ledger.share("grain") > 0.01

    @pytest.mark.parametrize(
        "what", [{"layer": fc.DopedLayer("n", 100)}, {"contact": fc.Contact("a")}, {"J02_edge_nA_per_cm": 1.0}]
    )
    def test_carries_no_layer_contact_or_edge(self, what):
        with pytest.raises(fc.InputError, match="boundary, which lies inside the volume, with"):
            self.problem(**what)

    def test_light_enters_the_outside_only(self):
        problem = self.problem(srv_cm_per_s=1.0)
        with pytest.raises(fc.InputError, match="lit_surface 'boundary'"):
            problem.changed(lit_surface="boundary")

    def test_half_inside_is_refused(self):
        problem = self.problem(srv_cm_per_s=1.0)
        mesh = problem.mesh
        mixed = np.concatenate([mesh.surfaces["boundary"], mesh.surfaces["x_min"]])
        surfaces = {n: f for n, f in mesh.surfaces.items() if n not in ("boundary", "x_min")} | {"mixed": mixed}
        broken = fc.Mesh(mesh.cells, surfaces, mesh.volumes)
        with pytest.raises(fc.InputError, match=r"of which 50 % lies inside"):
            fc.Problem(broken, problem.volumes, {"mixed": fc.Surface(srv_cm_per_s=1)}, cell_area_cm2=1.0)


class TestEdge:
    @pytest.mark.parametrize("pitch_y_um", [None, 300])
    def test_dark_current_is_that_of_the_edge(self, pitch_y_um):
        """Nothing else recombines: J = J02 (exp(qV/2kT) − 1) per length of edge over the plan area (the definition)."""
        base = fc.Base(
            "p", doping_per_cm3=1e16, thickness_um=100, lifetime_us=math.inf, auger=None, radiative_cm3_per_s=0
        )
        front = fc.Face(fc.Surface(layer=fc.DopedLayer("n", 1e-6), contact=fc.Contact("front")))
        rear = fc.Surface(contact=fc.Contact("rear"))
        side = fc.Surface(J02_edge_nA_per_cm=19.0)
        cell = fc.UnitCell(base, 400, pitch_y_um, front=front, rear=rear, sides={"x_max": side})
        voltage, VT = 0.1, base.equilibrium().VT
        solution = fc.solve_bipolar(fc.problem(cell), voltage)
        wanted = -19e-6 * math.expm1(voltage / (2 * VT)) / 200e-4
        assert solution.cell_current_mA_per_cm2 == pytest.approx(wanted, rel=2e-5)  # the base drops 1e-5 of kT/q
        assert solution.ledger.rows["surface", "x_max: edge"] == pytest.approx(-wanted, rel=2e-5)

    def test_scales_with_the_square_root_of_ni_squared(self):
        sides = {"x_max": fc.Surface(J02_edge_nA_per_cm=19.0)}
        cells = [half(light=None, sides=sides, base=dataclasses.replace(BASE, temperature_K=T)) for T in (298.15, 340)]
        found = [fc.solve_bipolar(fc.problem(c), 0.3).ledger.rows["surface", "x_max: edge"] for c in cells]
        eq = [c.base.equilibrium() for c in cells]
        growth = [e.ni * math.expm1(0.3 / (2 * e.VT)) for e in eq]
        assert found[1] / found[0] == pytest.approx(growth[1] / growth[0], rel=0.02)  # currents drop some of the bias

    def test_belongs_to_a_side_that_meets_a_junction(self):
        with pytest.raises(fc.InputError, match="an edge current on a side"):
            half(rear=fc.Surface(J02_edge_nA_per_cm=1.0))
        bare = half(front=fc.Surface(contact=fc.Contact("front")), sides={"x_max": fc.Surface(J02_edge_nA_per_cm=1.0)})
        with pytest.raises(fc.InputError, match="meets no layer of the type opposite"):
            fc.solve_excess(fc.problem(bare))


class TestRefusals:
    @pytest.mark.parametrize(
        ("given", "text"),
        [
            ({"x_um": 1.0}, "a recombination law"),
            ({"srv_cm_per_s": 1.0}, "exactly one of x_um, y_um"),
            ({"x_um": 1.0, "y_um": 1.0, "srv_cm_per_s": 1.0}, "exactly one of x_um, y_um"),
            ({"x_um": math.nan, "srv_cm_per_s": 1.0}, "a finite number"),
            ({"x_um": 1.0, "srv_cm_per_s": -1.0}, "a number of at least 0"),
            ({"x_um": 1.0, "srv_cm_per_s": 1.0, "J0_fA_per_cm2": 1.0}, "one recombination law"),
        ],
    )
    def test_planes(self, given, text):
        with pytest.raises(fc.InputError, match=text):
            InnerSurface(**given)

    @pytest.mark.parametrize(
        ("inner", "text"),
        [
            (plane(0.0), "a position inside the modelled piece, 0 to 400"),
            (plane(401.0), "a position inside the modelled piece"),
            ({"g": InnerSurface(y_um=3, srv_cm_per_s=1)}, "x_um in a 2-D cell"),
            (plane(from_z_um=90.0, to_z_um=20.0), "0 ≤ from < to ≤ 150"),
            ({"front": InnerSurface(x_um=3, srv_cm_per_s=1)}, "a name other than"),
            ({"a b": InnerSurface(x_um=3, srv_cm_per_s=1)}, "letters, digits"),
            ({"a": InnerSurface(x_um=3, srv_cm_per_s=1), "b": InnerSurface(x_um=3, srv_cm_per_s=2)}, "in one place"),
            ({"a": fc.Surface(srv_cm_per_s=1)}, "an InnerSurface"),
            ([1], "grain_boundary"),
        ],
    )
    def test_cells(self, inner, text):
        with pytest.raises(fc.InputError, match=text):
            half(inner=inner)
