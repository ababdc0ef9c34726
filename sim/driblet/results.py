"""A finished or interrupted run, read lazily: numpy arrays by name, an xarray dataset when xarray is there."""

from __future__ import annotations

import html
import json
from collections.abc import Iterator, Mapping
from contextlib import contextmanager
from dataclasses import dataclass
from functools import cached_property
from pathlib import Path
from typing import Any

import h5py
import numpy as np
from numpy.typing import NDArray

from driblet.errors import one_problem
from driblet.leap_record import leap_arrays
from driblet.outcomes import GRID, Outcomes
from driblet.quantities import copies_per_molar
from driblet.readouts import evaluate
from driblet.run_file import SERIES, digest
from driblet.samples import covariance
from driblet.store import open_run, reading
from driblet.system import System, loads
from driblet.system.expressions import Names, read_value
from driblet.system.standard_readouts import standard_readout
from driblet.treatments import with_treatments


@dataclass(frozen=True)
class Sums:
    """Exact time integrals gathered while running, over windows of time.

    Attributes: edge_s : (windows + 1,); burn_in_s : as stated in the file, None when it is to be found; monomial_time :
    (replicates, windows, channels), s, integrals of each channel's falling factorials; count_time : (replicates, windows,
    species), copies times s; window_firings : int64, (replicates, windows + 1, channels), cumulative at each edge;
    occupancy_time : (replicates, species, bins), s, bin_width : (species,), copies, the last bin holds all above; span_s :
    when occupancies were gathered.
    """

    edge_s: NDArray[np.float64]
    burn_in_s: float | None
    monomial_time: NDArray[np.float64]
    count_time: NDArray[np.float64]
    window_firings: NDArray[np.int64]
    occupancy_time: NDArray[np.float64]
    bin_width: NDArray[np.int64]
    span_s: tuple[float, float]

    def mean(self) -> NDArray[np.float64]:
        """Time-weighted mean counts over the span, shape=(replicates, species)."""
        first = int(np.searchsorted(self.edge_s, self.span_s[0] * (1 - 1e-12)))
        span = float(self.edge_s[-1] - self.edge_s[first])
        return np.asarray(self.count_time[:, first:].sum(axis=1) / span)


class Run:
    """One ensemble of replicates. Nothing is read before it is asked for; arrays have the replicate axis first.

    Open a file with `Run(path)`; `driblet.run` returns one. Use it as a context manager, or call `close`.
    """

    def __init__(self, source: str | Path | h5py.File) -> None:
        self.name = source.filename if isinstance(source, h5py.File) else str(source)
        self._files = [source] if isinstance(source, h5py.File) else open_run(source)
        with reading(self.name):
            self._read_frame()

    def _read_frame(self) -> None:
        first = self._files[0]
        rows = np.concatenate([f["replicate"][:] for f in self._files])
        # a replicate can stand in two shards when Ctrl-C came between writing and noting it: the same bits twice
        self._order = np.unique(rows, return_index=True)[1]
        self.replicate: NDArray[np.int64] = rows[self._order]
        self.time_s: NDArray[np.float64] = first["time"][:]
        self.species: tuple[str, ...] = tuple(first["species"].asstr()[:])
        self.reactions: tuple[str, ...] = tuple(first["reaction"].asstr()[:])
        self.replicates_planned = int(first.attrs["replicates_planned"])
        # a hash of the system file, the settings and the seed: equal for runs that must give the same bits
        self.identity = str(first.attrs["identity"])
        units: Mapping[str, str] = json.loads(first["provenance"].attrs["readout_units"])
        self.readout_units = dict(units)

    @property
    def complete(self) -> bool:
        """Whether every planned replicate is there."""
        return len(self.replicate) == self.replicates_planned

    @contextmanager
    def _opened(self) -> Iterator[list[h5py.File]]:
        if not all(self._files):
            raise ValueError(f"{self.name} has been closed; what was not read before is out of reach")
        with reading(self.name):
            yield self._files

    def _read(self, name: str, rows: slice = slice(None)) -> NDArray[Any]:
        with self._opened() as files:
            if len(files) == 1 and np.array_equal(self._order, np.arange(len(self._order))):
                return np.asarray(files[0][name][rows])
            joined = np.concatenate([f[name][:] for f in files])
            return np.asarray(joined[self._order][rows])

    @cached_property
    def counts(self) -> NDArray[np.int64]:
        """Copies of each free species, int64, shape=(replicates, times, species)."""
        return self._read("counts")

    @cached_property
    def firings_forward(self) -> NDArray[np.int64]:
        """Forward firings since time zero, int64, shape=(replicates, times, reactions)."""
        return self._read("firings_forward")

    @cached_property
    def firings_backward(self) -> NDArray[np.int64]:
        """Backward firings since time zero, int64, shape=(replicates, times, reactions)."""
        return self._read("firings_backward")

    def turnovers(self, reaction: str, enzyme: str | None = None) -> NDArray[np.int64]:
        """Net forward turnovers of a reaction since time zero, int64, shape=(replicates, times).

        By its own rate and by every enzyme that catalyses it, or by one `enzyme` alone. Raises KeyError for unknown names.
        """
        system = self.system
        system.reaction(reaction)
        counted = [
            (r.name, times)
            for r in system.reactions
            for turned, times in r.turns
            if turned == reaction and enzyme in (None, r.enzyme)
        ]
        if enzyme is None and reaction in self.reactions:
            counted.append((reaction, 1))
        if not counted:
            raise KeyError(f"{enzyme!r} is no enzyme that catalyses {reaction}")
        total = np.zeros(self.firings_forward.shape[:2], dtype=np.int64)
        for name, direction in counted:
            r = self.reactions.index(name)
            total += direction * (self.firings_forward[:, :, r] - self.firings_backward[:, :, r])
        return total

    @cached_property
    def sums(self) -> Sums | None:
        """What was summed up while running; None for a run file without."""
        with self._opened() as files:
            if "stationary" not in files[0]:
                return None
            burn_in = files[0]["provenance"].attrs.get("burn_in_s")
            edge_s = files[0]["stationary/window_edge"][:]
            bin_width = files[0]["stationary/bin_width"][:]
            begin, end = files[0]["stationary/span"][:]
        names = ("monomial_time", "count_time", "window_firings", "occupancy_time")
        return Sums(
            edge_s=edge_s,
            burn_in_s=None if burn_in is None else float(burn_in),
            bin_width=bin_width,
            span_s=(float(begin), float(end)),
            **{name: self._read(f"stationary/{name}") for name in names},
        )

    @cached_property
    def covariance(self) -> NDArray[np.float64] | None:
        """Covariance of the counts that were sampled after the burn-in, shape=(replicates, species, species).

        None for a run without statistics, NaN where there are fewer than two samples.
        """
        if self.sums is None:
            return None
        with self._opened() as files:
            kept = "stationary/covariance" in files[0]
        if kept:  # of a summary, which has no samples any more
            return self._read("stationary/covariance")
        return covariance(self.time_s, self.counts, self.sums.span_s)

    def event_list(self, replicate: int) -> tuple[NDArray[np.float64], NDArray[np.int64]]:
        """Times in s and channels of the events of one replicate, as far as they were kept.

        Channels number the directions of reactions in the order of `Network.channels`. Raises KeyError when the run did
        not record events (record = "events") or has no such replicate.
        """
        found = np.flatnonzero(self.replicate == replicate)
        if not len(found):
            raise KeyError(f"replicate {replicate} is not in this run")
        with self._opened() as files:
            if "events_kept" not in files[0]:
                raise KeyError('this run kept no events; run it with record = "events"')
        times, channels = (self._read(f"events_kept/{name}")[found[0]] for name in ("time", "channel"))
        return np.asarray(times, dtype=float), np.asarray(channels).astype(np.int64)

    @cached_property
    def volume_L(self) -> NDArray[np.float64]:
        """Inner volume of each compartment, L, shape=(replicates,)."""
        return self._read("volume")

    @cached_property
    def events(self) -> NDArray[np.int64]:
        """Reaction events of each replicate, shape=(replicates,)."""
        return self._read("events")

    @cached_property
    def end_reason(self) -> NDArray[np.int64]:
        """Why each replicate ended; codes as in driblet.engines.contract.REASONS."""
        return self._read("end_reason")

    def readout(self, name: str) -> NDArray[np.float64]:
        """A readout of the system file or one by standard name, shape=(replicates, times). Raises KeyError for another."""
        if name not in self.readout_units and standard_readout(name, [s.name for s in self.system.species]):
            expression = read_value(name, Names([s.name for s in self.system.species]))
            omega = copies_per_molar(1.0) * self.volume_L[:, None]
            return evaluate(self.system, expression, self.counts, omega)
        if name not in self.readout_units:
            raise KeyError(f"{name!r} is not a readout of this run; known: {', '.join(self.readout_units) or 'none'}")
        return self._read(f"readout_{name}")

    @cached_property
    def outcomes(self) -> Outcomes:
        """What came of each requirement of the system file in each compartment."""
        if not self.system.requirements:
            return Outcomes.empty(len(self.replicate), 0)
        if not self._judged_while_running:
            return self._judged_on_samples()
        return Outcomes.read(self._read)

    @property
    def _judged_while_running(self) -> bool:
        return "requirements_looked_at" in self.provenance

    def _judged_on_samples(self) -> Outcomes:
        from driblet.requirements import judge_on_grid

        omega = copies_per_molar(1.0) * self.volume_L
        each = []
        for one in self.system.requirements:
            # a summary keeps the two ends, which tell nothing of what was between
            if self.provenance.get("record") == "summary" and (one.averaged or one.when != "at end"):
                each.append(Outcomes.empty(len(self.replicate), 1))
            else:
                each.append(judge_on_grid(self.system, one, self.counts, self.time_s, omega))
        parts = [outcomes.values() for outcomes in each]
        return Outcomes.read({path: np.hstack([part[path] for part in parts]) for path in parts[0]})

    @property
    def requirement_resolution(self) -> Mapping[str, str]:
        """Where each requirement was looked at: "event", "leap" or "grid"."""
        if not self._judged_while_running:
            return {one.name: GRID for one in self.system.requirements}
        return dict(json.loads(str(self.provenance["requirements_looked_at"])))

    @property
    def requirements_on_samples(self) -> Mapping[str, str]:
        """The requirements that were judged on samples only, and why."""
        return dict(json.loads(str(self.provenance.get("requirements_on_samples", "{}"))))

    def final_counts(self) -> NDArray[np.int64]:
        """Counts at the end, int64, shape=(replicates, species), without reading the rest."""
        with self._opened() as files:
            return np.concatenate([f["counts"][:, -1] for f in files])[self._order]

    def initial_counts(self) -> NDArray[np.int64]:
        """Counts at time zero, int64, shape=(replicates, species), without reading the rest."""
        with self._opened() as files:
            return np.concatenate([f["counts"][:, 0] for f in files])[self._order]

    @property
    def last_addition_s(self) -> float:
        """When something was added last, s; 0 where nothing was. From then on a compartment's totals are its own."""
        return max((a.at_s for a in self.system.additions if a.at_s < self.time_s[-1]), default=0.0)

    def class_counts(self) -> NDArray[np.int64]:
        """Counts at the first sample after the last addition, int64, shape=(replicates, species): they fix the class."""
        first = int(np.searchsorted(self.time_s, self.last_addition_s))
        with self._opened() as files:
            return np.concatenate([f["counts"][:, first] for f in files])[self._order]

    @cached_property
    def system(self) -> System:
        """The system this run simulated, built anew from the text kept in the file."""
        with self._opened() as files:
            text = files[0]["provenance/system_file"].asstr()[()]
            if files[0]["provenance"].attrs["system_file_sha256"] != digest(text):
                raise ValueError("the text of the system file has changed")
        system = loads(text, f"system file in {self.name}")
        return with_treatments(system, self.treatments, float(self.time_s[1]), "exact")[0] if system.enzymes else system

    @cached_property
    def treatments(self) -> dict[str, str]:
        """How each enzyme was treated: "elementary" or "lumped"."""
        return {name: str(fact["taken"]) for name, fact in self.lumping.items()}

    @cached_property
    def lumping(self) -> dict[str, dict[str, Any]]:
        """For each enzyme what was asked for and taken, and why; empty where all are elementary and nothing was asked."""
        return dict(json.loads(str(self.provenance.get("treatments", "{}"))))

    @property
    def engine(self) -> str:
        """What simulated the run: "exact" or "leap"."""
        kept = self.provenance
        return str(kept.get("engine_taken", kept["engine"]))

    @cached_property
    def leaping(self) -> dict[str, NDArray[Any]]:
        """What leaping took in each replicate, shape=(replicates,), by the names in leap_record.py; empty for an exact run."""
        if self.engine != "leap":
            return {}
        return {array.path.partition("/")[2]: self._read(array.path) for array in leap_arrays()}

    @property
    def provenance(self) -> dict[str, Any]:
        """How the run was made: versions, engine, settings, seed, host, wall time."""
        with self._opened() as files:
            attributes = dict(files[0]["provenance"].attrs)
        return {name: value.item() if isinstance(value, np.generic) else value for name, value in attributes.items()}

    def to_xarray(self) -> Any:
        """The run as an xarray Dataset with named dimensions and units. Raises InputError without xarray."""
        try:
            import xarray
        except ImportError as error:
            raise one_problem("to_xarray", "", 'needs xarray: pip install "driblet[xarray]"') from error
        axes = {"counts": "species", "firings_forward": "reaction", "firings_backward": "reaction"}
        data = {name: (("replicate", "time", axes[name]), self._read(name), {"units": "1"}) for name in SERIES}
        for name, unit in self.readout_units.items():
            data[f"readout_{name}"] = (("replicate", "time"), self.readout(name), {"units": unit})  # type: ignore[assignment]
        data["volume"] = (("replicate",), self.volume_L, {"units": "L"})  # type: ignore[assignment]
        if self.system.requirements:
            for field, values in vars(self.outcomes).items():
                unit = "s" if field.endswith("_s") else "1"
                data[f"requirement_{field}"] = (("replicate", "requirement"), values, {"units": unit})  # type: ignore[assignment]
        coordinates = {
            "replicate": self.replicate,
            "time": ("time", self.time_s, {"units": "s"}),
            "species": list(self.species),
            "reaction": list(self.reactions),
            **({"requirement": [r.name for r in self.system.requirements]} if self.system.requirements else {}),
        }
        return xarray.Dataset(data, coords=coordinates, attrs={"title": self.system.title})

    def close(self) -> None:
        """Close the file or files."""
        for file in self._files:
            file.close()

    def __enter__(self) -> Run:
        return self

    def __exit__(self, *_: object) -> None:
        self.close()

    def __repr__(self) -> str:
        state = "" if self.complete else f" of {self.replicates_planned} planned (interrupted)"
        return (
            f"<driblet Run {self.name!r}: {len(self.replicate)} replicates{state}, {len(self.time_s)} times to "
            f"{self.time_s[-1]:g} s, {len(self.species)} species, {len(self.reactions)} reactions>"
        )

    def _repr_html_(self) -> str:
        counts = self.final_counts()
        rows = "".join(
            f"<tr><td>{html.escape(name)}</td><td>{counts[:, i].mean():.4g}</td><td>{counts[:, i].std():.3g}</td></tr>"
            for i, name in enumerate(self.species)
        )
        return f"{html.escape(repr(self))}<table><tr><th>species</th><th>mean at end</th><th>sd</th></tr>{rows}</table>"
