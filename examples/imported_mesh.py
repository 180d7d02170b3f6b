"""A mesh made elsewhere: what does the finger in it collect, and is the mesh fine enough to say so?

The mesh file names its parts: `front_finger`, `front_passivated`, `rear`, and the volume `base`; sides without a name
are mirror planes. Light of one wavelength enters beside the finger, G = α Φ exp(−α d). Solved is

    ∇·(D ∇Δn) + G = R(Δn),   Δn = 0 at the junction under the finger (short circuit),
    −q D ∂Δn/∂ν = J0 (np/ni² − 1) on the passivated front, −D ∂Δn/∂ν = S Δn at the rear,

on the mesh as it is and with every cell split into four, twice; the difference says how far the number can be trusted.

Pictures and fields go to the folder `results` where the script is run.
"""

from pathlib import Path

import fem_carriers as fc

MESH = Path(__file__).resolve().parents[1] / "meshes" / "finger_cell_2d.msh"
WIDTH_UM = 600

surfaces = {
    "front_finger": fc.Surface(J0_fA_per_cm2=500, layer=fc.DopedLayer("n", 60), contact=fc.Contact("front")),
    "front_passivated": fc.Surface(J0_fA_per_cm2=8),
    "rear": fc.Surface(srv_cm_per_s=50),
}


def main():
    results = Path("results")
    results.mkdir(exist_ok=True)
    mesh = fc.read_mesh(MESH, length_unit="um")
    print(mesh)
    problem = fc.Problem(
        mesh,
        volumes={"base": fc.Base("p", doping_per_cm3=5e16, lifetime_us=100)},
        surfaces=surfaces,
        light=fc.Light.monochromatic(flux_per_cm2_s=2e16, wavelength_nm=900),
        lit_surface="front_passivated",
        cell_area_cm2=WIDTH_UM * 1e-4,  # per cm of finger
    )
    solution = fc.solve_excess(problem, target_error_percent=0.02)
    name = "collected_front_mA_per_cm2"
    levels = solution.uncertainty.table
    print(fc.with_bars(levels, {"unknowns": "unknowns", name: "collected (mA/cm²)"}).to_string(index=False))
    print(solution.ledger)
    change = 100 * (levels[name].iloc[0] / levels[name].iloc[-1] - 1)
    print(
        f"Collected: {solution.collection_efficiency_percent:.2f} %; the mesh as imported is {change:+.3f} % off that"
    )
    fc.view(solution, picture=results / "imported_mesh.png", arrows=True)
    fc.write_fields(solution, results / "imported_mesh.vtu")
    return solution, levels[name].tolist()


if __name__ == "__main__":
    main()
