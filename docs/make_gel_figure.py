"""Draws ``docs/figures/gel_response.svg`` from tfm.gel alone: ``python docs/make_gel_figure.py``."""

from __future__ import annotations

import sys
from pathlib import Path

import matplotlib

matplotlib.use("Agg")
import matplotlib.pyplot as plt
import numpy as np

from tfm.gel import Gel, dipole_interaction, fourier_response, surface_tensor

SHADES = matplotlib.colormaps["cividis"]([0.0, 0.32, 0.6, 0.82])
MODULUS = 5e3  # Pa


def fourier_panel(axes: plt.Axes) -> None:
    s = np.logspace(-2, 1.2, 300)
    for nu, style in ((0.3, "--"), (0.5, "-")):
        gel, half = Gel(MODULUS, nu, 1.0), Gel(MODULUS, nu)
        for component, (shade, name) in enumerate(((SHADES[0], "along k"), (SHADES[2], "across k"))):
            if component == 1 and nu == 0.3:
                continue  # across k, nu enters through the shear modulus alone
            ratio = fourier_response(gel, s)[component] / fourier_response(half, s)[component]
            label = f"{name}, ν = {nu:g}" if component == 0 else f"{name}, any ν"
            axes.loglog(s, ratio, style, color=shade, label=label)
    axes.set(xlabel="wave number × thickness, k h", ylabel="response of layer / half-space", ylim=(8e-3, 2))
    axes.set_title("a  Long waves feel the base", loc="left")
    axes.legend(frameon=False, loc="lower right")


def distance_panel(axes: plt.Axes) -> None:
    r = np.logspace(0, np.log10(200), 300)
    for shade, thickness in zip(SHADES, (None, 100.0, 30.0, 10.0), strict=True):
        gel = Gel(MODULUS, 0.45, None if thickness is None else thickness * 1e-6)
        moved = surface_tensor(gel, r * 1e-6, 0.0)[0] * 1e-9 * 1e6  # um per nN
        axes.loglog(
            r, moved, color=shade, label="infinitely thick" if thickness is None else f"{thickness:.0f} µm thick"
        )
    axes.set(xlabel="distance in front of the force (µm)", ylabel="displacement along it (µm per nN)", ylim=(1e-6, 0.1))
    axes.set_title("b  A thin gel cuts it off beyond h", loc="left")
    axes.legend(frameon=False, loc="lower left", title="E = 5 kPa, ν = 0.45", alignment="left")


def poisson_panel(axes: plt.Axes) -> None:
    nu, distance, dipole = np.linspace(0.0, 0.5, 101), 40e-6, [-1e-12, 0.0, 0.0]
    for shade, thickness in zip((SHADES[0], SHADES[2]), (None, 30e-6), strict=True):
        name = "infinitely thick" if thickness is None else "30 µm thick"
        for style, place, where in (("-", (0.0, distance), "side by side"), ("--", (distance, 0.0), "in line")):
            energy = [dipole_interaction(Gel(MODULUS, v, thickness), dipole, dipole, *place).energy for v in nu]
            axes.plot(nu, np.array(energy) * 1e15, style, color=shade, label=f"{where}, {name}")
    axes.axhline(0, color="0.6", lw=0.8, zorder=0)
    axes.axvline(1 / 3, color="0.6", lw=0.8, ls=":", zorder=0)
    axes.text(1 / 3 + 0.008, 0.97, "ν = 1/3", transform=axes.get_xaxis_transform(), va="top", color="0.35")
    axes.set(xlabel="Poisson ratio", ylabel="interaction energy (fJ)", xlim=(0, 0.5))
    axes.set_title("c  ν decides the sign of a pair", loc="left")
    axes.legend(
        frameon=False, loc=(0.01, 0.36), title="two dipoles of −1 pN m,\n40 µm apart, E = 5 kPa", alignment="left"
    )


def draw(path: Path) -> None:
    style = {
        "svg.hashsalt": "tfm",
        "svg.fonttype": "none",
        "font.size": 8.5,
        "axes.titlesize": 9,
        "axes.spines.top": False,
        "axes.spines.right": False,
        "legend.fontsize": 7.5,
        "legend.title_fontsize": 7.5,
    }
    with plt.rc_context(style):
        figure, axes = plt.subplots(1, 3, figsize=(9.6, 3.9), layout="constrained")
        fourier_panel(axes[0])
        distance_panel(axes[1])
        poisson_panel(axes[2])
        figure.savefig(path, metadata={"Date": None} if path.suffix == ".svg" else None)
        plt.close(figure)


if __name__ == "__main__":
    draw(Path(sys.argv[1]) if len(sys.argv) > 1 else Path(__file__).parent / "figures" / "gel_response.svg")
