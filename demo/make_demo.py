"""Makes the two demo spectra. Planet, star and observatory are invented; the seeds are fixed."""

from pathlib import Path

import numpy as np

from transit.simulate import Truth, simulate_spectrum
from transit.system import read_system

HERE = Path(__file__).resolve().parent
RESOLVING_POWER = 45
TRUTH = Truth(
    temperature_k=760.0,
    log10_vmr={"H2O": -3.3},
    log10_deck_pressure_bar=-1.6,
    log10_haze_strength=0.3,
    haze_exponent=-3.0,
)


def main() -> None:
    """Write `with_band.csv` and `look_alike.csv` beside this script."""
    system = read_system(HERE / "system.toml")
    edges = np.geomspace(0.85, 2.05, int(np.log(2.05 / 0.85) * RESOLVING_POWER) + 1)
    centre, half = 0.5 * (edges[1:] + edges[:-1]), 0.5 * np.diff(edges)
    error = 55e-6 * (1 + 0.6 * ((centre - 1.4) / 0.6) ** 2)
    for name, truth, seed, text in (
        ("with_band", TRUTH, 41, "holds water (log10 mixing ratio -3.3) over a grey deck at 25 mbar"),
        ("look_alike", None, 42, "holds nothing: a flat line with the same errors"),
    ):
        spectrum = simulate_spectrum(truth, system, centre, half, error, seed)
        lines = [
            "# INVENTED DATA: planet, star and observatory do not exist",
            f"# planet: {system.planet_name}; instrument: Lantern spectrograph, Corrigan Ridge Observatory",
            f"# made by demo/make_demo.py, seed {seed}; {text}",
            "wavelength_um,half_width_um,depth_ppm,depth_err_ppm",
        ]
        for row in zip(
            spectrum.wavelength_um,
            spectrum.half_width_um,
            spectrum.depth_ppm,
            spectrum.depth_err_ppm,
            strict=True,
        ):
            lines.append("{:.5f},{:.5f},{:.2f},{:.2f}".format(*row))
        (HERE / f"{name}.csv").write_text("\n".join(lines) + "\n")


if __name__ == "__main__":
    main()
