"""What the reader of a fit must be told of smoothing that the data chose."""

from __future__ import annotations

from kernelfit.fitting.effective import TermSize
from kernelfit.fitting.outcome import Note
from kernelfit.fitting.smoothing import ChosenWeight, Smoothing
from kernelfit.kernels import Kernel

_WHERE = {"kernel": "smoothing", "after-spike": "after_spike"}
_NAMED = {"kernel": "smoothing of the kernel", "after-spike": "ridge on after-spike coefficients"}
_BY = {
    "likelihood": "the marginal likelihood",
    "validation": "the log-likelihood of stretches of time left out",
}


def smoothing_notes(smoothing: Smoothing | None, sizes: tuple[TermSize, ...], kernel: Kernel) -> tuple[Note, ...]:
    """How each weight was chosen, and what it means where it ended at a bound; nothing where all were stated."""
    if smoothing is None:
        return ()
    if smoothing.n_rounds == 0:
        guesses = " and ".join(f"{_NAMED[w.term]} {w.value:.4g}" for w in smoothing.weights)
        what = (
            f"The data could not choose the smoothing, as they say nothing about some parameter: {guesses} is a guess."
        )
        return (Note("warning", what, "smoothing", "Use a kernel with fewer parameters, or state a smoothing."),)
    notes = [_note(weight, sizes, kernel) for weight in smoothing.weights]
    if not smoothing.settled:
        what = f"The smoothing did not settle in {smoothing.n_rounds} rounds."
        notes.insert(0, Note("warning", what, "smoothing", "Look at fit.smoothing_path(), and state a smoothing."))
    return tuple(notes)


def _note(weight: ChosenWeight, sizes: tuple[TermSize, ...], kernel: Kernel) -> Note:
    size = next(size for size in sizes if size.term == weight.term)
    effective = f"{size.effective:.1f} effective parameters of {size.coefficients} coefficients"
    chosen = f"The {_NAMED[weight.term]}, {weight.value:.4g}, was chosen by {_BY[weight.chosen_by]}: {effective}"
    if weight.at_bound == 0:
        likely = f"weights from {weight.likely_from:.2g} to {weight.likely_to:.2g} are likely too"
        return Note("info", f"{chosen}; {likely}.", _WHERE[weight.term], _remedy(weight))
    if weight.at_bound < 0:
        said = f"{chosen}. It is at its lower bound, as good as none: the data ask for no smoothing."
        return Note("info", said, _WHERE[weight.term], _remedy(weight))
    left = kernel.smoothest if weight.term == "kernel" else "no effect of own spikes"
    said = f"{chosen}. It is at its upper bound, as good as endless: the data ask for no more than {left}."
    return Note("info", said, _WHERE[weight.term], _remedy(weight))


def _remedy(weight: ChosenWeight) -> str:
    if weight.term == "kernel":
        return "fit.smoothing_path() shows the kernel under other smoothings."
    return "Nothing to do; a number for ridge holds it fixed."
