"""Where does a textbook energy of ATP hydrolysis hold?

The standard transformed energy over pH and pMg at 37 degC and 0.15 M ionic strength, from the reference table. The two
textbook figures, -30.5 and -36.0 kJ/mol, are lines on this map, not constants; the squares are settings people work in, with
what the table says there. Usage: python examples/atp_energy_map.py [FOLDER]
"""

import sys
from pathlib import Path

import numpy as np
from matplotlib.figure import Figure

from driblet.energetics.conditions import Conditions
from driblet.energetics.reference import reference_table
from driblet_analysis.figures import COLOURS, save, style

HYDROLYSIS = {"ATP": -1, "H2O": -1, "ADP": 1, "Pi": 1}
TEXTBOOK = (-36.0, -30.5)
SETTINGS = {  # common practice, no source
    "cytosol, 0.8 mM free Mg": (7.2, 3.1),
    "cell-free mix, 3 mM free Mg": (7.8, 2.5),
    "acidic vesicle, 1 mM": (6.0, 3.0),
    "EDTA, no Mg": (7.4, 6.5),
}


def energy(pH, pMg):
    """dG0' of ATP hydrolysis, kJ/mol, at 37 degC and 0.15 M."""
    return reference_table().energy(HYDROLYSIS, Conditions(310.15, pH, pMg, 0.15)).dG0


pH, pMg = np.linspace(5.5, 9.0, 71), np.linspace(1.5, 7.0, 56)
grid = np.array([[energy(x, y) for x in pH] for y in pMg])

with style():
    figure = Figure(figsize=(7.0, 4.8), layout="constrained")
    ax = figure.subplots()
    ax.grid(False)
    levels = np.arange(np.floor(grid.min() / 2) * 2, grid.max() + 2, 2.0)
    filled = ax.contourf(pH, pMg, grid, levels=levels, cmap="cividis")
    lines = ax.contour(pH, pMg, grid, levels=TEXTBOOK, colors="white", linewidths=1.8, linestyles="solid")
    ax.clabel(
        lines, fmt=lambda value: f"{value:.1f}".replace("-", "−"), fontsize=9.5, manual=[(6.95, 5.6), (7.05, 2.1)]
    )
    for name, (x, y) in SETTINGS.items():
        ax.plot(x, y, "s", color=COLOURS[1], markersize=7, markeredgecolor="white")
        ax.annotate(
            f"{name}: −{-energy(x, y):.1f}",
            (x, y),
            xytext=(-30, -20) if x < 7 else (0, 9),
            textcoords="offset points",
            ha="left" if x < 7 else "center",
            fontsize=8.5,
            bbox={"boxstyle": "round,pad=0.2", "facecolor": "white", "edgecolor": "none", "alpha": 0.85},
        )
    ax.set_xlabel("pH")
    ax.set_ylabel("pMg (−log10 of free Mg²⁺ in mol/L)")
    ax.set_title("ATP hydrolysis at 37 °C and 0.15 M: textbook values are lines, not constants")
    figure.colorbar(filled, ax=ax, label="ΔG°′ (kJ/mol)")
    folder = Path(sys.argv[1] if len(sys.argv) > 1 else ".")
    print("written:", save(figure, folder / "atp_energy_map.png"))
