"""The covariances of a fit as plain JSON values and back."""

from __future__ import annotations

from collections.abc import Mapping
from typing import Any

from kernelfit.fitting.block_length import BlockCurve
from kernelfit.fitting.covariance import Uncertainty
from kernelfit.fitting.plain_values import floats, floats_or_none, plain, plain_or_null


def describe_uncertainty(uncertainty: Uncertainty) -> dict[str, Any]:
    """Every number of the covariances, and of the curve their blocks were chosen from."""
    curve = uncertainty.block_curve
    return {
        "shared_model": plain(uncertainty.shared_model),
        "shared_robust": plain(uncertainty.shared_robust),
        "shared_jackknife": plain_or_null(uncertainty.shared_jackknife),
        "own_model": plain(uncertainty.own_model),
        "own_robust": plain(uncertainty.own_robust),
        "own_jackknife": plain_or_null(uncertainty.own_jackknife),
        "block_influence": plain(uncertainty.block_influence),
        "n_blocks": uncertainty.n_blocks,
        "block_length_s": uncertainty.block_length_s,
        "weak_moves": plain(uncertainty.weak_moves),
        "alone": plain(uncertainty.alone),
        "block_curve": {
            "length_s": plain(curve.length_s),
            "n_blocks": plain(curve.n_blocks),
            "std_error": plain(curve.std_error),
            "correlation": plain(curve.correlation),
            "threshold": plain(curve.threshold),
            "chosen": curve.chosen,
            "settled": curve.settled,
        },
    }


def restore_uncertainty(u: Mapping[str, Any], n_targets: int, n_own: int, n_shared: int) -> Uncertainty:
    """Back from what `describe_uncertainty` gave."""
    c = u["block_curve"]
    n_lengths = len(c["length_s"])
    return Uncertainty(
        shared_model=floats(u["shared_model"], n_shared, n_shared),
        shared_robust=floats(u["shared_robust"], n_shared, n_shared),
        own_model=floats(u["own_model"], n_targets, n_own, n_own),
        own_robust=floats(u["own_robust"], n_targets, n_own, n_own),
        shared_jackknife=floats_or_none(u["shared_jackknife"], n_shared, n_shared),
        own_jackknife=floats_or_none(u["own_jackknife"], n_targets, n_own, n_own),
        block_influence=floats(u["block_influence"], int(u["n_blocks"]), n_shared),
        n_blocks=int(u["n_blocks"]),
        block_length_s=float(u["block_length_s"]),
        block_curve=BlockCurve(
            length_s=floats(c["length_s"], n_lengths),
            n_blocks=floats(c["n_blocks"], n_lengths),
            std_error=floats(c["std_error"], n_lengths, n_shared),
            correlation=floats(c["correlation"], n_lengths, n_shared),
            threshold=floats(c["threshold"], n_lengths),
            chosen=int(c["chosen"]),
            settled=bool(c["settled"]),
        ),
        weak_moves=floats(u["weak_moves"], len(u["weak_moves"]), n_shared),
        alone=floats(u["alone"], n_shared),
    )
