"""Replicates on disk: one line of JSON each, appended as they are finished, so that an interrupted run can go on.

The first line says whose replicates they are. Floating-point numbers are written so that they come back to the bit. A
last line that was cut short is taken off; a file of another fit, kind, seed or version is refused.
"""

from __future__ import annotations

import hashlib
import json
from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from types import TracebackType
from typing import IO, Any

from kernelfit.errors import OutputError, StorageError
from kernelfit.fitting.plain_values import floats, floats_or_none, plain, plain_or_null
from kernelfit.fitting.result import CouplingFit
from kernelfit.fitting.storage import check_sum, describe_fit
from kernelfit.inference.bootstrap.kind import BootstrapKind, Replicate
from kernelfit.version import __version__

FORMAT = "kernelfit bootstrap replicates"
FORMAT_VERSION = 1
FILE_NAME = "replicates.jsonl"
DIGITS = 16  # of a digest in hexadecimal: enough to tell any two fits apart
# what differs between two runs of the same fit, or changes nothing about its replicates
PASSING = ("version", "created", "seed", "seconds", "solver", "notes", "second_optimum", "after_spike_test")


def header(fit: CouplingFit, kind: BootstrapKind, seed: int) -> dict[str, Any]:
    """What identifies replicates: format, version, digests of fit and recording, kind, seed."""
    content = {name: value for name, value in describe_fit(fit).items() if name not in PASSING}
    recording = {name: value for name, value in content["recording"].items() if name not in ("files", "notes")}
    content["recording"] = recording
    content["uncertainty"].pop("covariance")  # which of its covariances the tables use
    return {
        "format": FORMAT,
        "format_version": FORMAT_VERSION,
        "kernelfit": __version__,
        "fit": f"{fit.model.kernel.name} kernel, {check_sum(content)[:DIGITS]}",
        "recording": f"{len(fit.unit_ids)} units, {int(fit.counts.sum())} spikes, {_counts_digest(fit)}",
        **kind.describe(),
        "seed": seed,
    }


def _counts_digest(fit: CouplingFit) -> str:
    return hashlib.sha256(fit.counts.astype("<i8").tobytes()).hexdigest()[:DIGITS]


@dataclass(eq=False)
class Journal:
    """The file of one bootstrap, open for appending. `finished` holds what it already had, by number.

    Use it in a ``with`` block.

    Raises
    ------
    StorageError : the file is of something else, or damaged
    OutputError : the folder cannot be written
    """

    folder: Path
    head: Mapping[str, Any]
    n_shared: int
    finished: dict[int, Replicate] = field(default_factory=dict)
    _file: IO[bytes] | None = None

    @property
    def path(self) -> Path:
        """The file."""
        return self.folder / FILE_NAME

    def __enter__(self) -> Journal:
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            whole = self.path.read_bytes() if self.path.exists() else b""
            kept = self._read(whole)
            self._file = self.path.open("r+b" if self.path.exists() else "x+b")
            self._file.truncate(kept)
            self._file.seek(kept)
            if kept == 0:
                self._write(self.head)
        except OSError as error:
            raise OutputError(
                f"{self.path}: cannot be written ({error.strerror}). Give a folder that can be."
            ) from error
        return self

    def __exit__(
        self, kind: type[BaseException] | None, error: BaseException | None, trace: TracebackType | None
    ) -> None:
        if self._file is not None:
            self._file.close()

    def append(self, number: int, replicate: Replicate) -> None:
        """Write one more replicate, through to the operating system."""
        self._write(
            {
                "replicate": number,
                "converged": replicate.converged,
                "shared": plain(replicate.shared),
                "at_bound": plain(replicate.at_bound),
                "covariance": plain_or_null(replicate.covariance),
                "message": replicate.message,
            }
        )

    def _write(self, values: Mapping[str, Any]) -> None:
        if self._file is None:
            raise ValueError("the journal is not open")
        self._file.write(json.dumps(values, allow_nan=False, separators=(",", ":")).encode() + b"\n")
        self._file.flush()

    def _read(self, whole: bytes) -> int:
        """Fill `finished`; how many bytes are good."""
        lines = whole.split(b"\n")
        torn = lines.pop()  # empty where the file ends with a whole line
        kept = len(whole) - len(torn)
        for k, line in enumerate(lines):
            try:
                values = json.loads(line)
                if k == 0:
                    self._check(values)
                    continue
                number, replicate = self._restore(values)
            except (ValueError, KeyError, TypeError, AttributeError) as error:
                if k > 0 and k == len(lines) - 1:  # a disk that filled up or lost power
                    return kept - len(line) - 1
                raise StorageError(
                    f"{self.path}, row {k + 1}: not a replicate as kernelfit writes them ({error}). Take the file away "
                    "to start over."
                ) from error
            self.finished.setdefault(number, replicate)
        return kept

    def _restore(self, values: Mapping[str, Any]) -> tuple[int, Replicate]:
        q = self.n_shared
        return int(values["replicate"]), Replicate(
            shared=floats(values["shared"], q),
            at_bound=floats(values["at_bound"], q),
            covariance=floats_or_none(values["covariance"], q, q),
            converged=bool(values["converged"]),
            message=str(values["message"]),
        )

    def _check(self, found: Any) -> None:
        if not isinstance(found, dict) or found.get("format") != FORMAT:
            raise StorageError(f"{self.path}: not a file of replicates. Give another folder.")
        if found == dict(self.head):
            return
        raise StorageError(
            f"{self.path}: these replicates are of {_in_words(found)}; asked for are replicates of "
            f"{_in_words(self.head)}. Give another folder, or take this one away to start over."
        )


def _in_words(head: Mapping[str, Any]) -> str:
    law = f" ({head['law']})" if "law" in head else ""
    return (
        f"fit [{head.get('fit')}; {head.get('recording')}], kind {head.get('kind')!r}{law}, seed {head.get('seed')}, "
        f"kernelfit {head.get('kernelfit')}, format {head.get('format_version')}"
    )
