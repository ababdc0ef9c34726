"""The yardstick: a C program generated for one network, as a careful programmer would write it by hand.

The direct method with one `switch` over channels, each case changing its counts and the propensities that depend on them;
xoshiro256++; gcc -O3 -march=native -ffast-math. It records nothing and counts no firings, which favours it.
"""

from __future__ import annotations

import shutil
import subprocess
from pathlib import Path

import numpy as np

from driblet.network import Network

HEAD = """\
#include <math.h>
#include <stdint.h>
#include <stdio.h>
#include <stdlib.h>
#include <time.h>
static uint64_t s[4];
static inline uint64_t rotl(uint64_t x, int k) { return (x << k) | (x >> (64 - k)); }
static inline uint64_t next(void) {
  uint64_t r = rotl(s[0] + s[3], 23) + s[0], t = s[1] << 17;
  s[2] ^= s[0]; s[3] ^= s[1]; s[1] ^= s[2]; s[0] ^= s[3]; s[2] ^= t; s[3] = rotl(s[3], 45);
  return r;
}
static inline double uniform(void) { return ((next() >> 11) + 0.5) * (1.0 / 9007199254740992.0); }
int main(int argc, char **argv) {
  long replicates = atol(argv[1]), events = 0;
  double end = atof(argv[2]);
  uint64_t z = atol(argv[3]);
  for (int i = 0; i < 4; i++) {
    uint64_t y = (z += 0x9e3779b97f4a7c15ull);
    y = (y ^ (y >> 30)) * 0xbf58476d1ce4e5b9ull;
    y = (y ^ (y >> 27)) * 0x94d049bb133111ebull;
    s[i] = y ^ (y >> 31);
  }
  struct timespec from, to;
  clock_gettime(CLOCK_PROCESS_CPUTIME_ID, &from);
  for (long r = 0; r < replicates; r++) {
"""
TAIL = """\
    }
  }
  clock_gettime(CLOCK_PROCESS_CPUTIME_ID, &to);
  printf("%ld %.9g\\n", events, to.tv_sec - from.tv_sec + 1e-9 * (to.tv_nsec - from.tv_nsec));
}
"""


def compiler() -> str | None:
    """A C compiler, or None."""
    return shutil.which("gcc") or shutil.which("cc")


def source(network: Network, rates: np.ndarray, counts: np.ndarray) -> str:
    """The program of a network with the given rates (channels,) and initial counts (species,)."""
    arrays, m = network.arrays, len(network.channels)

    def propensity(j: int) -> str:
        text = f"{rates[j]:.17g}"
        for i, multiplicity in network.channels[j].reactants:
            text += "".join(f" * (x[{i}] - {k})" if k else f" * x[{i}]" for k in range(multiplicity))
        return text

    lines = [f"    double x[{len(counts)}] = {{{', '.join(f'{c:.0f}' for c in counts)}}};"]
    lines += [f"    double a[{m}], t = 0, total;", *(f"    a[{j}] = {propensity(j)};" for j in range(m))]
    lines += [
        "    for (;;) {",
        f"      total = {' + '.join(f'a[{j}]' for j in range(m))};",
        "      if (total <= 0) break;",
    ]
    lines += ["      t -= log(uniform()) / total;", "      if (t > end) break;", "      double u = uniform() * total;"]
    lines += ["      int j = 0; double sum = a[0];", f"      while (sum < u && j < {m - 1}) sum += a[++j];"]
    lines += ["      switch (j) {"]
    for j, channel in enumerate(network.channels):
        changes = " ".join(f"x[{i}] += {d};" for i, d in channel.change)
        dependents = arrays.depend_channel[arrays.depend_start[j] : arrays.depend_start[j + 1]]
        lines.append(f"      case {j}: {changes} {' '.join(f'a[{d}] = {propensity(d)};' for d in dependents)} break;")
    return HEAD + "\n".join([*lines, "      }", "      events++;"]) + "\n" + TAIL


def build(network: Network, rates: np.ndarray, counts: np.ndarray, folder: Path, name: str) -> Path:
    """Compile the program; returns the executable. Raises CalledProcessError when the compiler fails."""
    code, program = folder / f"{name}.c", folder / name
    code.write_text(source(network, rates, counts))
    flags = ["-O3", "-march=native", "-ffast-math"]
    subprocess.run([compiler() or "cc", *flags, "-o", str(program), str(code), "-lm"], check=True)
    return program


def measure(program: Path, replicates: int, end_s: float, seed: int) -> tuple[int, float]:
    """Events and seconds of CPU of one run."""
    command = [str(program), str(replicates), repr(end_s), str(seed)]
    events, seconds = subprocess.run(command, check=True, capture_output=True, text=True).stdout.split()
    return int(events), float(seconds)
