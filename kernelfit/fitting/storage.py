"""Fits on disk: one JSON file, readable by anything, with no code in it.

Floating-point numbers come back to the bit, and a check sum tells a file that was cut short, garbled or edited.
"""

from __future__ import annotations

import hashlib
import json
import math
import os
import tempfile
from collections.abc import Mapping
from dataclasses import asdict, fields
from pathlib import Path
from typing import Any, cast

from kernelfit._validation import described
from kernelfit.errors import ArgumentError, KernelfitError, OutputError, StorageError, Unavailable
from kernelfit.fitting.detection import CouplingVerdict
from kernelfit.fitting.effective import TermSize
from kernelfit.fitting.outcome import Note, ScoreTest, SolverReport
from kernelfit.fitting.plain_values import floats, plain, whole_numbers
from kernelfit.fitting.result import CouplingFit, covariance_kind
from kernelfit.fitting.search import StartRecord
from kernelfit.fitting.smoothing_storage import describe_smoothing, restore_smoothing
from kernelfit.fitting.uncertainty_storage import describe_uncertainty, restore_uncertainty
from kernelfit.kernels import KERNELS, DistanceRange, kernel_from_description
from kernelfit.model.coupling import CouplingModel
from kernelfit.model.terms import AfterSpike, NoAfterSpike
from kernelfit.recording.recording import Origin, SourceFile

FORMAT = "kernelfit fit"
FORMAT_VERSION = 1
CHECK_SUM = "sha256"


def save_fit(fit: CouplingFit, path: str | Path) -> None:
    """Write a fit, whole or not at all.

    Raises
    ------
    ArgumentError : no path
    OutputError : the file cannot be written
    """
    if not isinstance(path, (str, os.PathLike)):
        raise ArgumentError(f"path: {described(path)} is no path. Name a file, such as 'fit.json'.")
    path = Path(path)
    content = describe_fit(fit)
    text = json.dumps({**content, CHECK_SUM: check_sum(content)}, indent=1, allow_nan=False)
    try:
        handle, temporary = tempfile.mkstemp(dir=path.parent, prefix=f".{path.name}.")
        try:
            with os.fdopen(handle, "w", encoding="utf-8") as file:
                file.write(text)
            os.chmod(temporary, 0o644)  # mkstemp makes files that only their owner can read
            os.replace(temporary, path)
        except BaseException:
            os.unlink(temporary)
            raise
    except OSError as error:
        raise OutputError(
            f"{path}: cannot be written ({error.strerror}). Check the folder and its permissions."
        ) from error


def _why_unreadable(error: Exception) -> str:
    """In words what the JSON library says in its own."""
    if isinstance(error, UnicodeDecodeError):
        return "it is not text"
    if isinstance(error, json.JSONDecodeError):
        if not error.doc.strip():
            return "it is empty"
        return f"from line {error.lineno} on it is not JSON"
    return "it is nested without end"


def load_fit(path: str | Path) -> CouplingFit:
    """Read a fit that `CouplingFit.save` wrote. It holds no spikes: methods that need them take `recording`.

    Raises
    ------
    ArgumentError : no path
    StorageError : no such file, damaged, not a kernelfit fit, or of a later format
    """
    if not isinstance(path, (str, os.PathLike)):
        raise ArgumentError(f"path: {described(path)} is no path. Give the path of a fit.json.")
    path = Path(path)
    try:
        content = json.loads(path.read_text(encoding="utf-8"))
    except OSError as error:
        raise StorageError(f"{path}: cannot be read ({error.strerror}). Give the path of a fit.json.") from error
    except (UnicodeDecodeError, json.JSONDecodeError, RecursionError) as error:
        raise StorageError(
            f"{path}: damaged, or not a saved fit ({_why_unreadable(error)}). Fit again, or copy the file again from "
            "where it was made."
        ) from error
    if not isinstance(content, dict) or content.get("format") != FORMAT:
        raise StorageError(f"{path}: JSON, but not a fit saved by kernelfit. Give the fit.json of a results folder.")
    if content.get("format_version") != FORMAT_VERSION:
        raise StorageError(
            f"{path}: saved in format {content.get('format_version')!r} by kernelfit "
            f"{content.get('version')!r}; this version "
            f"reads format {FORMAT_VERSION}. Load it with the version that wrote it, or fit again."
        )
    stated = content.pop(CHECK_SUM, None)
    if stated != check_sum(content):
        raise StorageError(
            f"{path}: damaged, or edited after it was saved: its check sum does not match. Fit again, or copy the file "
            "again from where it was made."
        )
    try:
        kernel = content["model"]["kernel"]
        if kernel not in KERNELS:
            raise StorageError(
                f"{path}: fitted with the kernel {kernel!r}, which is not one of kernelfit's own "
                f"({', '.join(KERNELS)}): a kernel written elsewhere cannot be loaded. Fit again where it is defined."
            )
        return _restore(content)
    except StorageError:
        raise
    except (KeyError, TypeError, ValueError, IndexError, AttributeError, ArithmeticError, KernelfitError) as error:
        raise StorageError(
            f"{path}: damaged: {type(error).__name__} at {error}. Fit again, or copy the file again from "
            "where it was made."
        ) from error


def check_sum(content: Mapping[str, Any]) -> str:
    """SHA-256 of what a file says, whatever its layout: keys sorted, no spaces."""
    return hashlib.sha256(json.dumps(content, sort_keys=True, separators=(",", ":")).encode()).hexdigest()


def describe_fit(fit: CouplingFit) -> dict[str, Any]:
    """A fit as plain JSON values; NaN becomes null."""
    model = fit.model
    return {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "version": fit.version,
        "created": fit.created,
        "seed": fit.seed,
        "seconds": fit.seconds,
        "model": {
            "kernel": model.kernel.name,
            "kernel_options": model.kernel.describe(),
            "link": model.link.name,
            "bin_width_s": model.bin_width,
            "leak_rate_hz": model.leak_rate,
            "max_distance_um": model.max_distance,
            "same_site": model.same_site,
            "after_spike": {"name": model.after_spike.name, **asdict(model.after_spike)},
            "rate_course": model.rate_course.name,
            "warm_up_s": model.warm_up_s,
        },
        "recording": {
            "files": [asdict(f) for f in fit.origin.files],
            "windows_stated": fit.origin.windows_stated,
            "notes": list(fit.origin.notes),
            "unit_ids": list(fit.unit_ids),
            "positions_um": plain(fit.positions),
            "windows_s": plain(fit.window_bounds),
            "counts": plain(fit.counts),
            "n_bins": fit.n_bins,
        },
        "geometry": {**asdict(fit.span), "distinct_um": plain(fit.distinct_um), "n_pairs": plain(fit.n_pairs)},
        "estimate": {
            "targets": plain(fit.targets),
            "own": plain(fit.own),
            "shared": plain(fit.shared),
            "at_bound": plain(fit.at_bound),
            "free": [bool(free) for free in fit.free],
            "bound_reasons": list(fit.bound_reasons),
            "has_same_site": fit.has_same_site,
            "radius_interval_um": fit.radius_interval,
        },
        "uncertainty": {"covariance": fit.covariance_kind, **describe_uncertainty(fit.uncertainty)},
        "log_likelihood": {
            "fit": fit.log_likelihood,
            "constant_rates": fit.null_log_likelihood,
            "saturated": fit.saturated_log_likelihood,
            "without_coupling": fit.uncoupled_log_likelihood,
        },
        "spectral_radius": fit.spectral_radius,
        "verdict": asdict(fit.verdict),
        "notes": [asdict(n) for n in fit.notes],
        "solver": _finite({**asdict(fit.solver), "starts": [_finite(asdict(start)) for start in fit.solver.starts]}),
        "second_optimum": fit.second_optimum,
        "after_spike_test": None if fit.after_spike_test is None else asdict(fit.after_spike_test),
        "terms": [asdict(size) for size in fit.term_sizes],
        "smoothing": None if fit.smoothing is None else describe_smoothing(fit.smoothing),
    }


def _finite(record: dict[str, Any]) -> dict[str, Any]:
    return {k: None if isinstance(v, float) and not math.isfinite(v) else v for k, v in record.items()}


def _restore(c: Mapping[str, Any]) -> CouplingFit:
    m, r, g, e, u, ll = (c[k] for k in ("model", "recording", "geometry", "estimate", "uncertainty", "log_likelihood"))
    n_targets, n_shared, n_units = len(e["targets"]), len(e["shared"]), len(r["unit_ids"])
    n_own = len(e["own"][0])
    s = c["solver"]
    return CouplingFit(
        model=_model(m),
        unit_ids=tuple(r["unit_ids"]),
        positions=floats(r["positions_um"], n_units, -1),
        origin=Origin(tuple(SourceFile(**f) for f in r["files"]), r["windows_stated"], tuple(r["notes"])),
        window_bounds=floats(r["windows_s"], -1, 2),
        targets=whole_numbers(e["targets"]),
        counts=whole_numbers(r["counts"]),
        n_bins=int(r["n_bins"]),
        own=floats(e["own"], n_targets, n_own),
        shared=floats(e["shared"], n_shared),
        at_bound=floats(e["at_bound"], n_shared),
        free=whole_numbers(e["free"]).reshape(n_shared).astype(bool),
        bound_reasons=tuple(e["bound_reasons"]),
        span=DistanceRange(g["reference_um"], g["smallest_um"], g["largest_um"], g["n_coordinates"]),
        distinct_um=floats(g["distinct_um"], -1),
        n_pairs=whole_numbers(g["n_pairs"]),
        has_same_site=bool(e["has_same_site"]),
        radius_interval=None if e["radius_interval_um"] is None else _pair(e["radius_interval_um"]),
        uncertainty=restore_uncertainty(u, n_targets, n_own, n_shared),
        covariance_kind=covariance_kind(u["covariance"]),
        log_likelihood=float(ll["fit"]),
        null_log_likelihood=float(ll["constant_rates"]),
        saturated_log_likelihood=float(ll["saturated"]),
        uncoupled_log_likelihood=float(ll["without_coupling"]),
        spectral_radius=float(c["spectral_radius"]),
        verdict=CouplingVerdict(**{f.name: c["verdict"][f.name] for f in fields(CouplingVerdict)}),
        notes=tuple(Note(**n) for n in c["notes"]),
        solver=SolverReport(
            converged=bool(s["converged"]),
            n_iterations=int(s["n_iterations"]),
            max_gradient=float("inf") if s["max_gradient"] is None else float(s["max_gradient"]),
            message=str(s["message"]),
            starts=tuple(_start(start) for start in s["starts"]),
        ),
        second_optimum=c["second_optimum"],
        after_spike_test=_score_test(c["after_spike_test"]),
        term_sizes=tuple(TermSize(t["term"], int(t["coefficients"]), float(t["effective"])) for t in c["terms"]),
        smoothing=None if c["smoothing"] is None else restore_smoothing(c["smoothing"]),
        seed=int(c["seed"]),
        seconds=float(c["seconds"]),
        version=str(c["version"]),
        created=str(c["created"]),
    )


def _start(values: Mapping[str, Any]) -> StartRecord:
    objective = values["objective"]  # null: the likelihood there was not finite
    return StartRecord(values["leak"], -math.inf if objective is None else objective, values["n_iterations"])


def _score_test(values: Mapping[str, Any] | None) -> ScoreTest | Unavailable | None:
    if values is None:
        return None
    return Unavailable(values["reason"]) if "reason" in values else ScoreTest(**values)


def _pair(values: Any) -> tuple[float, float]:
    return cast(tuple[float, float], tuple(float(v) for v in values))


def _model(m: Mapping[str, Any]) -> CouplingModel:
    after = dict(m["after_spike"])
    name = after.pop("name")
    if name == AfterSpike.name:
        constants = after.pop("time_constants_s")
        term: AfterSpike | NoAfterSpike = AfterSpike(None if constants is None else tuple(constants), **after)
    elif name == NoAfterSpike.name:
        term = NoAfterSpike()
    else:
        raise ValueError(f"after_spike {name!r}")
    return CouplingModel(
        kernel=kernel_from_description(m["kernel"], m["kernel_options"]),
        link=m["link"],
        bin_width=m["bin_width_s"],
        leak_rate=m["leak_rate_hz"],
        max_distance=m["max_distance_um"],
        same_site=m["same_site"],
        after_spike=term,
        rate_course=m["rate_course"],
        warm_up_s=m["warm_up_s"],
    )
