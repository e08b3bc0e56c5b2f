"""The figure of bootstrap replicates: its numbers are those of the tables, and it is drawn whatever is missing."""

from __future__ import annotations

from dataclasses import replace

import numpy as np
import pytest
from worlds import NOTHING, model, simulated

from kernelfit.inference.bootstrap import Parametric
from kernelfit.report.bootstrap_data import replicates_data
from kernelfit.report.figures_bootstrap import draw_replicates

pytestmark = pytest.mark.filterwarnings("ignore::kernelfit.KernelfitWarning")


@pytest.fixture(scope="module")
def boot():
    return model().fit(simulated(3, duration_s=60.0)).bootstrap("one-step", n_replicates=400)


def test_numbers_are_those_of_the_tables(boot):
    data = replicates_data(boot)
    numbers = data.numbers().set_index(["parameter", "kind"])
    for method, word in (
        ("percentile", "percentile"),
        ("basic", "basic"),
        ("studentised", "studentised"),
        ("bca", "BCa"),
    ):
        table = boot.intervals(method=method)
        for name, shown in (("amplitude", "amplitude"), ("length_um", "length"), ("leak_rate", "leak rate")):
            got = numbers.loc[(shown, word), ["estimate", "lower", "upper"]].to_numpy(dtype=float)
            want = table.loc[name, ["estimate", "lower", "upper"]].to_numpy(dtype=float)
            np.testing.assert_array_equal(got, want)
    wald = numbers.loc[("length", "robust, no replicates"), ["lower", "upper"]].to_numpy(dtype=float)
    np.testing.assert_array_equal(wald, boot.fit.parameters.loc["length_um", ["lower", "upper"]].to_numpy(dtype=float))
    assert all(p.values.size == 400 for p in data.parameters)
    assert data.caption == boot.sentence


def test_the_title_says_what_is_known_worst(boot):
    data = replicates_data(boot)
    table = boot.intervals()
    relative = (table["upper"] - table["lower"]) / table["estimate"].abs()
    assert relative.idxmax().removesuffix("_um").replace("_", " ") in data.title


def test_a_column_for_each_parameter_and_a_row_for_each_kind(boot):
    figure = draw_replicates(replicates_data(boot))
    axes = np.array(figure.axes).reshape(2, -1)
    assert [ax.get_xlabel() for ax in axes[1]] == ["amplitude (per spike)", "length (µm)", "leak rate (1/s)"]
    rows = [t.get_text() for t in axes[1, 0].get_yticklabels()]
    assert rows == ["percentile", "basic", "studentised", "BCa", "robust, no replicates"]
    counts = [sum(bar.get_height() for bar in ax.patches) for ax in axes[0]]
    beyond = [sum(int(t.get_text().split()[0]) for t in ax.texts) for ax in axes[0]]
    assert [c + b for c, b in zip(counts, beyond, strict=True)] == [400, 400, 400]
    assert axes[0, 0].get_xscale() == "linear"
    assert axes[0, 1].get_xscale() == "log"


def test_other_kinds_and_levels(boot):
    """No BCa where replicates do not come from blocks; the fit's own intervals stand at 95 % alone."""
    kinds = replicates_data(replace(boot, kind=Parametric())).numbers()["kind"].unique()
    assert "BCa" not in kinds
    assert list(replicates_data(boot, 0.9).numbers()["kind"].unique()) == ["percentile", "basic", "studentised", "BCa"]


def test_drawn_whatever_is_missing(boot):
    few = boot.fit.bootstrap("one-step", n_replicates=20)
    data = replicates_data(few)
    assert "too few" in data.title
    assert [i.known for i in data.parameters[0].intervals] == [False, False, False, False, True]
    draw_replicates(data)
    failed = replace(boot, converged=np.zeros(400, dtype=bool))
    assert replicates_data(failed).parameters == ()
    draw_replicates(replicates_data(failed))
    nothing = model().fit(simulated(11, NOTHING, duration_s=30.0)).bootstrap("one-step", n_replicates=99)
    data = replicates_data(nothing)
    assert [p.name for p in data.parameters] == ["amplitude"]
    assert data.title.startswith("No coupling found")
    draw_replicates(data)
    disc = model("disc").fit(simulated(3, duration_s=60.0)).bootstrap("one-step", n_replicates=99)
    assert [p.name for p in replicates_data(disc).parameters] == ["amplitude", "leak rate"]  # the radius is held
    draw_replicates(replicates_data(disc))
