"""The header of a raw table: columns found by exact name, and what to do where one is missing."""

from __future__ import annotations

import re
from collections.abc import Sequence
from dataclasses import dataclass, field

from kernelfit.errors import Fault
from kernelfit.recording.columns import Measures
from kernelfit.recording.findings import names
from kernelfit.recording.raw_table import KNOWN_COLUMNS, LENGTH_UNITS, TIME_UNITS, RawTable

# What people call these columns elsewhere, by the stem of the name here; compared in lower case, blanks as "_".
_ALSO_CALLED: dict[str, tuple[str, ...]] = {
    "unit": ("unit_id", "neuron", "neuron_id", "cell", "cell_id", "cluster", "cluster_id", "channel", "site", "id"),
    "time": ("t", "times", "timestamp", "timestamps", "spike_time", "spike_times", "spiketime", "spiketimes"),
    "x": ("pos_x", "x_pos", "position_x", "x_position", "posx", "xpos", "x_coord", "x_coordinate"),
    "start": ("begin", "onset", "from", "t_start", "tstart"),
    "stop": ("end", "offset", "to", "t_stop", "tstop", "t_end", "finish"),
    "unit_a": ("unit_1", "unit1", "cell_a", "neuron_a", "from", "source", "a"),
    "unit_b": ("unit_2", "unit2", "cell_b", "neuron_b", "to", "target", "b"),
}
_SHOWN = 12  # a matrix of spikes may have thousands of columns
_LONGEST_NAME = 40

# The columns that make a table one of its role, for noticing tables given in each other's place.
_ESSENTIAL: dict[str, tuple[frozenset[str], ...]] = {
    "spikes": tuple(frozenset({"unit", f"time_{u}"}) for u in TIME_UNITS),
    "sites": tuple(frozenset({"unit", f"x_{u}"}) for u in LENGTH_UNITS),
    "windows": tuple(frozenset({f"start_{u}", f"stop_{u}"}) for u in TIME_UNITS),
    "exclude_pairs": (frozenset({"unit_a", "unit_b"}),),
}


@dataclass(frozen=True, slots=True)
class _Missing:
    """A column that is not there.

    Parameters
    ----------
    wanted : its name
    closest : the column that may have been meant, or None
    rename_to : what to call it
    load_with : "time_unit='ms'" where the closest column seems to be in that unit, or ""
    """

    wanted: str
    closest: str | None
    rename_to: str
    load_with: str = ""

    @property
    def only_other_unit(self) -> bool:
        """Whether the closest column has the right name but for its unit of measure."""
        return self.closest == self.rename_to


@dataclass(slots=True)
class Header:
    """Finds the columns of one table and keeps what is wrong with its header."""

    table: RawTable
    _missing: list[_Missing] = field(default_factory=list)
    _faults: list[Fault] = field(default_factory=list)

    def find(self, wanted: str) -> str | None:
        """A column by its exact name; None, and a fault, where it is not there or there twice."""
        n = self.table.names.count(wanted)
        if n == 1:
            return wanted
        if n == 0:
            self._missing.append(self._not_there(wanted))
        else:
            remedy = "Keep one of them, or rename the others."
            self._faults.append(self.table.fault(f"There are {n} columns of this name.", remedy, column=wanted))
        return None

    def optional(self, wanted: str) -> str | None:
        """A column that may be absent."""
        return self.find(wanted) if wanted in self.table.names else None

    def find_time(self, stem: str, measures: Measures) -> str | None:
        """``time_ms`` or ``time_s`` for milliseconds: the name with the unit first, then the standard name."""
        return self._find_measured(stem, measures.time_unit, TIME_UNITS, "time_unit")

    def find_length(self, stem: str, measures: Measures) -> str | None:
        """``x_mm`` or ``x_um`` for millimetres: the name with the unit first, then the standard name."""
        return self._find_measured(stem, measures.length_unit, LENGTH_UNITS, "length_unit")

    def refuse(self, problem: str, remedy: str, column: str | None = None) -> None:
        """One more thing wrong with the header."""
        self._faults.append(self.table.fault(problem, remedy, column=column))

    def is_sound(self, faults: list[Fault]) -> bool:
        """True, with the rows that could not be taken apart added to `faults`; False, with what is wrong here.

        Where columns are missing the rows say nothing: often it is another table, or a line above the header was
        taken for it, and every row would be a fault.
        """
        found = list(self._faults)
        if self._missing:
            found.insert(0, self._missing_fault())
        faults.extend(found or self.table.faults)
        return not found

    def _find_measured(self, stem: str, asked: str, units: Sequence[str], option: str) -> str | None:
        plain = f"{stem}_{units[0]}"
        for name in (f"{stem}_{asked}", plain):
            if name in self.table.names:
                return self.find(name)
        other = next((u for u in units if f"{stem}_{u}" in self.table.names), None)
        if other is None:
            return self.find(f"{stem}_{asked}")
        name = f"{stem}_{other}"
        self._missing.append(_Missing(plain, name, name, _load_with(option, other)))
        return None

    # --- words ----------------------------------------------------------------------------------------

    def _missing_fault(self) -> Fault:
        wanted = " and no column ".join(repr(m.wanted) for m in self._missing)
        found = names([_short(n) for n in self.table.names], shown=_SHOWN) or "none"
        remedy = self.table.hint or self._other_role() or self._remedy()
        return self.table.fault(f"There is no column {wanted}; found: {found}.", remedy)

    def _other_role(self) -> str:
        """A remedy where this is plainly a table of another role, or ""."""
        have = set(self.table.names)
        roles = [r for r, alternatives in _ESSENTIAL.items() if any(columns <= have for columns in alternatives)]
        role = self.table.source.role
        if not roles or role in roles:
            return ""
        order = " The spikes come first, then the sites." if {role, roles[0]} == {"spikes", "sites"} else ""
        return f"These are the columns of a {roles[0]} table: give a {role} table here.{order}"

    def _remedy(self) -> str:
        sentences = []
        in_other_unit = [m for m in self._missing if m.only_other_unit]
        if in_other_unit:
            columns = " and ".join(repr(m.closest) for m in in_other_unit)
            wanted = " and ".join(repr(m.wanted) for m in in_other_unit)
            convert = f"convert {columns} and write {wanted} in the header"
            sentences.append(f"Load with {in_other_unit[0].load_with}, or {convert}.")
        close = [m for m in self._missing if m.closest is not None and not m.only_other_unit]
        if close:
            renames = " and ".join(f"column {_short(m.closest or '')!r} to {m.rename_to!r}" for m in close)
            load = next((f" and load with {m.load_with}" for m in close if m.load_with), "")
            they_hold = "it holds" if len(close) == 1 else "they hold"
            sentences.append(f"Rename {renames}{load}, if that is what {they_hold}; names must match exactly.")
        unknown = [m.wanted for m in self._missing if m.closest is None]
        if unknown and len(unknown) == len(self._missing) > 1 and self.table.source.role == "spikes":
            sentences.append("Give one row for each spike, with its unit and its time.")
        if unknown:
            holding = "column that holds it" if len(unknown) == 1 else "columns that hold them"
            sentences.append(f"Call the {holding} {' and '.join(map(repr, unknown))}; names must match exactly.")
        return " ".join(sentences)

    # --- what may have been meant -----------------------------------------------------------------------

    def _not_there(self, wanted: str) -> _Missing:
        closest = self._closest(wanted)
        stem, _, unit = wanted.rpartition("_")
        named = "" if closest is None else _plain(closest).rpartition("_")[2]
        for option, units in (("time_unit", TIME_UNITS), ("length_unit", LENGTH_UNITS)):
            if unit in units and named in units[1:] and named != unit:
                return _Missing(wanted, closest, f"{stem}_{named}", _load_with(option, named))
        return _Missing(wanted, closest, wanted)

    def _closest(self, wanted: str) -> str | None:
        """A column that may have been meant: not one that has a meaning of its own, nor one spoken for."""
        from difflib import get_close_matches

        taken = {*KNOWN_COLUMNS[self.table.source.role], *(m.closest for m in self._missing)}
        free = {_plain(n): n for n in reversed(self.table.names) if n not in taken}
        stem = _without_unit(wanted)
        bare = {_without_unit(name): n for name, n in reversed(free.items())}
        for known, name in ((k, n) for k in (free, bare) for n in (wanted, stem, *_ALSO_CALLED.get(stem, ()))):
            if name in known:
                return known[name]
        close = get_close_matches(wanted, free, n=1, cutoff=0.5)
        if close:
            return free[close[0]]
        return next((n for name, n in free.items() if stem in name.split("_")), None)


def _plain(name: str) -> str:
    """A name in lower case, other signs than letters and digits as one underscore: "Time [ms]" is "time_ms"."""
    return re.sub(r"[^a-z0-9]+", "_", name.casefold().replace("μ", "u")).strip("_")  # casefold turns µ into μ


def _without_unit(name: str) -> str:
    stem, _, unit = name.rpartition("_")
    return stem if stem and unit in (*TIME_UNITS, *LENGTH_UNITS) else name


def _load_with(option: str, unit: str) -> str:
    return f"{option}={unit!r}" + (" and sampling_rate_hz=..., the samples per second" if unit == "samples" else "")


def _short(name: str) -> str:
    if not name:
        return "(no name)"
    return name if len(name) <= _LONGEST_NAME else name[: _LONGEST_NAME - 3] + "..."
