"""Captions of the figures on how sure the numbers are."""

from __future__ import annotations

from kernelfit.errors import Unavailable
from kernelfit.report.content_sureness import SureContent
from kernelfit.report.numbers import count_text
from kernelfit.report.words import block_text, level_text


def kinds(content: SureContent) -> str:
    """Under the intervals of every kind."""
    data = content.figures.kinds
    if isinstance(data, Unavailable):
        return ""
    return (
        f"{level_text(data.level)} intervals of every kind; thick: the kind the page states. Dot and dashed line: the "
        "estimate; an arrow: an end that is open. Model-based: right if every bin is independent given the model. "
        "Robust: from the scatter between blocks of time. Jackknife: each block left out in turn. Bootstrap: blocks "
        "weighted at random, one step, percentiles. Profile: values that a likelihood ratio scaled by the robust "
        "variance keeps. None of them sees a bias from what the model leaves out."
    )


def blocks(content: SureContent) -> str:
    """Under the curve of standard errors against the length of the blocks."""
    data = content.figures.blocks
    if isinstance(data, Unavailable):
        return ""
    return (
        "Robust standard error of each parameter (working scale) against the length of the blocks of time it is made "
        f"of, over that at the length used, {block_text(data.chosen_s)} (dashed). Dotted: model-based. From "
        f"{count_text(data.n_blocks[0])} blocks on the left to {count_text(data.n_blocks[-1])} on the right; the "
        "shorter the blocks, the more is taken for independent, the longer, the fewer numbers the standard error "
        "itself rests on."
    )


def influence(content: SureContent) -> str:
    """Under what leaving out each stretch and each unit does."""
    data = content.figures.influence
    if isinstance(data, Unavailable):
        return ""
    return (
        "Left: by how much each estimate would move without each stretch of time, in robust standard errors of the "
        "working scale; teal up, rust down. Right: the same for no longer explaining each unit, at its site; its "
        "spikes still drive the others. One step from the fit; the largest are refitted in the table."
    )


def marked(content: SureContent) -> str:
    """Under the kernel with the distances read off it."""
    data = content.figures.marked
    if isinstance(data, Unavailable):
        return ""
    return (
        "The kernel with its pointwise band, and the distances that follow from it: a mark at each, its "
        f"{level_text(data.kernel.level)} interval below the curve; an arrow: an end that is open. Below: pairs of "
        "units at each distance."
    )
