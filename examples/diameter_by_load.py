"""How large must a vesicle be, and how much ATP may it carry, to stay powered for 20 minutes in 95 % of cases?

The sweep of configs/diameter_by_load.toml, from plan to map, over the cores of this machine; stopped and started again, it
goes on where it was. Prints, for each ATP load, the least diameter of the grid whose share is surely reached (the lower limit
of its interval) and the least whose share is. Usage: python examples/diameter_by_load.py [FOLDER]
"""

import sys
from pathlib import Path

import numpy as np

from driblet_analysis.figures import save
from driblet_analysis.sweep import collect, make_plan, read_table, work_locally
from driblet_analysis.sweep_figure import sweep_figure

folder = Path(sys.argv[1] if len(sys.argv) > 1 else ".")
sweep = Path(__file__).parent.parent / "configs" / "diameter_by_load.toml"

plan = make_plan(sweep, folder / "diameter_by_load").plan
outcome = work_locally(plan.directory)
print(f"{plan.points} points, {outcome.written} simulated now, {outcome.left} left")
collect(plan.directory, folder / "diameter_by_load.h5", force=True)

table = read_table(folder / "diameter_by_load.h5").values
load, diameter = table["species.ATP"], table["compartments.vesicle.diameter"]
print("ATP (mM)   95 % in this sample from   95 % surely from")
for level in np.unique(load):
    chosen = load == level
    row = f"{level:8.1f}"
    for what in ("powered.share", "powered.share_low"):
        reached = diameter[chosen][table[what][chosen] >= table["powered.share_asked"][chosen]]
        row += f"{reached.min():18.0f} nm" if len(reached) else "   nowhere in the grid"
    print(row)
print("written:", save(sweep_figure(read_table(folder / "diameter_by_load.h5")), folder / "diameter_by_load.png"))
