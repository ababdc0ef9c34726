"""How small may a droplet be for a digital assay to see its enzyme in 95 % of droplets, at three concentrations?

Each answer is sized by simulation, with its interval, and stands beside the bound of loading alone: no droplet can be
smaller than holds -ln 0.05 = 3.0 copies in the mean. A short assay leaves that bound: a single copy then has not made enough
product in time, and two or three are needed. Usage: python examples/smallest_droplet.py [FOLDER]
"""

import math
import sys
import tempfile
from pathlib import Path

from matplotlib.figure import Figure

from driblet_analysis.figures import COLOURS, save, style
from driblet_analysis.sizing import size
from driblet_analysis.sizing_question import read_question

CONFIG = Path(__file__).parent.parent / "configs" / "smallest_droplet.toml"
CONCENTRATIONS = [0.05, 0.2, 0.8]  # nM
DURATIONS = ["5 s", "1.2 s"]
AVOGADRO = 6.02214076e23


def sized(folder, concentration, duration):
    text = CONFIG.read_text("utf-8").replace('"0.1 nM"', f'"{concentration} nM"')
    text = text.replace('duration = "5 s"', f'duration = "{duration}"')
    file = folder / "system.toml"
    file.write_text(text, "utf-8")
    bound = -math.log(0.05) / (concentration * 1e-9 * AVOGADRO) * 1e15  # fL
    limits = f"{bound / 5:.4g} fL", f"{bound * 5:.4g} fL"
    question = read_question(file, "compartments.droplet.volume", *limits, "seen", within=0.4)
    answer = size(question, folder / f"{concentration}-{duration}").finding.answer
    print(f"{concentration} nM, {duration}: {answer.value:.3g} fL ({answer.low:.3g} to {answer.high:.3g})", flush=True)
    return answer


with style(), tempfile.TemporaryDirectory() as temporary:
    figure = Figure(figsize=(6.4, 4.2), layout="constrained")
    ax = figure.subplots()
    bounds = [-math.log(0.05) / (c * 1e-9 * AVOGADRO) * 1e15 for c in CONCENTRATIONS]
    ax.plot(
        CONCENTRATIONS, bounds, color="#1F1F1F", linestyle=(0, (4, 3)), label="3.0 copies in the mean: loading alone"
    )
    for colour, marker, duration in zip(COLOURS, "os", DURATIONS, strict=False):
        answers = [sized(Path(temporary), c, duration) for c in CONCENTRATIONS]
        error = [[a.value - a.low for a in answers], [a.high - a.value for a in answers]]
        label = f"assay of {duration}, 95 % interval"
        values = [a.value for a in answers]
        ax.errorbar(
            CONCENTRATIONS, values, error, color=colour, marker=marker, linestyle="none", capsize=4, label=label
        )
    ax.set_xscale("log")
    ax.set_yscale("log")
    ax.set_xticks(CONCENTRATIONS, [str(c) for c in CONCENTRATIONS])
    ax.set_xticks([], minor=True)
    ax.set_xlabel("enzyme (nM)")
    ax.set_ylabel("least droplet volume (fL)")
    ax.set_title("The smallest droplet that lights up in 95 of 100")
    ax.legend()
    folder = Path(sys.argv[1] if len(sys.argv) > 1 else ".")
    print("written:", save(figure, folder / "smallest_droplet.png"))
