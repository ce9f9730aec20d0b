"""Rehearsals of two Gaussian candidates whose evidences are known exactly.

All data are invented, set at the fictional Lowmere reed-bed station.
"""

from __future__ import annotations

import csv
import dataclasses
import json
import math

import jax.numpy as jnp
import numpy as np
import pytest
from click.testing import CliRunner
from scipy import stats

import evidence as ev
from evidence.cli import main
from evidence.distributions import Normal, Poisson
from evidence.rehearsal.counting import LEADER, binomial_band, calibrate, size_for, wilson
from evidence.rehearsal.designs import checked_sizes, designs_of, take_rows
from evidence.rehearsal.driver import _simulate, _Source
from evidence.rehearsal.result import TABLES

BAGS = {"bag": np.arange(8.0), "grid": np.arange(3.0)}
SIZES, REPEATS = (4, 32), 300


def shifted(name="shifted", sd=1.0):
    """Grams around an unknown mean, unit noise: log evidence in closed form."""
    return ev.Model(
        name,
        {"mean": Normal(0.0, sd)},
        lambda p, data: Normal(p["mean"], 1.0).log_prob(data["grams"]),
        simulate=lambda key, p, data: {
            "grams": Normal(p["mean"] + 0.0 * data["bag"], 1.0).sample(key)
        },
    )


def nothing(name="nothing"):
    """Grams around zero, unit noise."""
    return ev.Model(
        name,
        {},
        lambda p, data: Normal(0.0, 1.0).log_prob(data["grams"]),
        simulate=lambda key, p, data: {"grams": Normal(0.0 * data["bag"], 1.0).sample(key)},
    )


def exact_log_evidences(y):
    """(rows, 2) for data sets (rows, n): shifted, nothing [nats]."""
    n = y.shape[1]
    plain = stats.norm(0, 1).logpdf(y).sum(axis=1)
    # n (mean of y)^2 has the prior precision 1 beside n: the determinant lemma by hand
    gain = -0.5 * np.log1p(n) + 0.5 * (y.sum(axis=1) ** 2) / (1 + n)
    return np.stack([plain + gain, plain], axis=1)


def quietly(*arguments, **options):
    return ev.rehearse(*arguments, progress=lambda words: None, **options)


@pytest.fixture(scope="module")
def models():
    return [shifted(), nothing()]


@pytest.fixture(scope="module")
def rehearsal(models):
    return quietly(models, BAGS, repeats=REPEATS, sizes=SIZES, seed=11)


@pytest.fixture(scope="module")
def simulated(models):
    """Size -> the data sets (2, repeats, n) that the rehearsal has weighed."""
    found = {}
    for design in designs_of(models, BAGS, SIZES):
        columns, usable, failures = _simulate(models, design, _Source(models, REPEATS, 11, None))
        assert usable.all()
        assert not failures
        found[design.size] = columns["grams"].reshape(2, REPEATS, design.size)
    return found


@pytest.mark.slow
@pytest.mark.parametrize("size", SIZES)
def test_every_evidence_is_the_exact_one(rehearsal, simulated, size):
    exact = np.stack([exact_log_evidences(y) for y in simulated[size]])
    assert rehearsal.run(size).log_evidence == pytest.approx(exact, abs=1e-8)
    assert not rehearsal.run(size).doubted.any()


@pytest.mark.parametrize("size", SIZES)
def test_confusion_is_what_direct_arithmetic_counts(rehearsal, simulated, size):
    frame = rehearsal.confusion(size).set_index(["generator", "leader"])
    for generator, y in zip(rehearsal.candidates, simulated[size], strict=True):
        exact = exact_log_evidences(y)
        led = int(np.sum(exact[:, 0] > exact[:, 1]))
        assert frame.loc[(generator, "shifted"), "data_sets"] == led
        assert frame.loc[(generator, "nothing"), "data_sets"] == REPEATS - led
        assert frame.loc[(generator, "shifted"), "share"] == pytest.approx(led / REPEATS)


@pytest.mark.parametrize("size", SIZES)
def test_shares_agree_with_their_exact_probabilities(rehearsal, size):
    # "shifted" leads where S^2 = (sum of y)^2 / n exceeds (1 + n) / n log(1 + n); S is normal
    # with variance 1 where nothing made the data, 1 + n where "shifted" did
    threshold = (1 + size) / size * math.log1p(size)
    led = rehearsal.table().set_index(["size", "generator"])["led"]
    for generator, probability in (
        ("shifted", stats.chi2(1).sf(threshold / (1 + size))),
        ("nothing", stats.chi2(1).cdf(threshold)),
    ):
        sd = math.sqrt(probability * (1 - probability) / REPEATS)
        assert led[size, generator] == pytest.approx(probability, abs=4 * sd)


def test_settled_is_what_direct_arithmetic_counts(rehearsal, simulated):
    table = rehearsal.table().set_index(["size", "generator"])
    for size, sets in simulated.items():
        for k, (name, y) in enumerate(zip(rehearsal.candidates, sets, strict=True)):
            exact = exact_log_evidences(y)
            lead = exact[:, k] - exact[:, 1 - k]
            assert table.loc[(size, name), "settled_right"] == pytest.approx(np.mean(lead >= 1.0))
            assert table.loc[(size, name), "settled_wrong"] == pytest.approx(np.mean(lead <= -1.0))
            middle = table.loc[(size, name), "median_log_bayes_factor"]
            assert middle == pytest.approx(np.median(lead), abs=1e-8)
    shares = table[["settled_right", "settled_wrong", "not_settled"]].sum(axis=1)
    assert shares.to_numpy() == pytest.approx(1.0)


def test_probabilities_are_calibrated(rehearsal):
    assert rehearsal.calibrated is True
    frame = rehearsal.calibration()
    leader = frame[frame["candidate"] == LEADER]
    assert leader["data_sets"].sum() == 2 * REPEATS * len(SIZES)
    assert leader["inside"].mean() >= 0.8
    assert "are calibrated" in rehearsal.summary


def test_probabilities_that_are_too_sure_are_called_off(rehearsal):
    def sharpened(run):
        sharp = run.probability**3
        return dataclasses.replace(run, probability=sharp / sharp.sum(axis=2, keepdims=True))

    off = dataclasses.replace(rehearsal, runs=tuple(map(sharpened, rehearsal.runs)))
    assert off.calibrated is False
    assert "off by more than chance" in off.summary


def test_log_bayes_factors_are_told_by_pair(rehearsal, simulated):
    frame = rehearsal.log_bayes_factors().set_index(["size", "generator"])
    exact = exact_log_evidences(simulated[32][1])
    factor = exact[:, 1] - exact[:, 0]
    assert frame.loc[(32, "nothing"), "mean"] == pytest.approx(factor.mean(), abs=1e-8)
    assert frame.loc[(32, "nothing"), "q05"] == pytest.approx(np.quantile(factor, 0.05), abs=1e-8)
    assert frame.loc[(32, "nothing"), "for_rival"] == pytest.approx(np.mean(factor < 0))
    assert frame.loc[(32, "nothing"), "misleading"] == pytest.approx(np.mean(factor <= -3))


def test_the_sample_size_asks_for_more_where_more_is_wanted(rehearsal):
    few, many = (rehearsal.sample_size(0.5, lead=x).set_index("generator") for x in (0.0, 4.0))
    assert few.loc["all", "bound"] == ""
    assert 4 < few.loc["all", "size"] < 32
    assert many.loc["nothing", "bound"] == "more than"  # log(33)/2 is below 4 nats
    assert math.isnan(many.loc["nothing", "size"])
    with pytest.raises(ev.DeclarationError, match="share must lie between 0 and 1; got 80"):
        rehearsal.sample_size(80)


def test_the_same_seed_gives_the_same_rehearsal(models, rehearsal):
    again = quietly(models, BAGS, repeats=REPEATS, sizes=SIZES[:1], seed=11)
    assert np.array_equal(again.runs[0].log_evidence, rehearsal.runs[0].log_evidence)
    other = quietly(models, BAGS, repeats=REPEATS, sizes=SIZES[:1], seed=12)
    assert not np.array_equal(other.runs[0].log_evidence, rehearsal.runs[0].log_evidence)


def test_a_rehearsal_speaks_in_short(rehearsal):
    assert len(repr(rehearsal).splitlines()) <= 12
    assert repr(rehearsal).startswith("Rehearsal: With 32 observations the candidate that made")
    for frame in (rehearsal.table(), rehearsal.calibration(), rehearsal.confusion()):
        assert list(frame.columns) == list(frame.attrs["columns"])
    assert rehearsal.failures == ()
    with pytest.raises(ev.DeclarationError, match="the sizes rehearsed are 4, 32; got 5"):
        rehearsal.confusion(5)


@pytest.mark.parametrize("which", ["confusion", "calibration", "growth", "log_bayes_factors"])
def test_each_picture_is_drawn(rehearsal, which):
    (axes,) = rehearsal.plot(which).axes
    assert axes.get_xlabel()


def test_the_overview_is_three_pictures(rehearsal):
    assert len(rehearsal.plot().axes) == 3
    one = dataclasses.replace(rehearsal, runs=rehearsal.runs[:1])
    assert len(one.plot().axes) == 2
    with pytest.raises(ev.DeclarationError, match="Did you mean 'growth'"):
        rehearsal.plot("grwth")


def test_a_rehearsal_is_saved(rehearsal, tmp_path):
    for suffix in (".json", ".csv", ".md"):
        rehearsal.save(tmp_path / f"r{suffix}")
    record = json.loads((tmp_path / "r.json").read_text())
    assert record["format"] == "evidence rehearsal"
    assert record["growth"][0]["led"] == rehearsal.table()["led"][0]
    assert set(record["columns"]) == set(TABLES)
    rows = list(csv.DictReader((tmp_path / "r.csv").read_text().splitlines()))
    assert float(rows[3]["settled_right"]) == rehearsal.table()["settled_right"][3]
    text = (tmp_path / "r.md").read_text()
    assert "## Who generated and who led" in text
    assert "- `right`: share in which" in text
    with pytest.raises(ev.DeclarationError, match=r"one of \.json, \.csv, \.md"):
        rehearsal.save(tmp_path / "r.html")


def test_hostile_names_stay_text(rehearsal, tmp_path):
    bad = dataclasses.replace(rehearsal, candidates=("=1+1", "a|b<script>"))
    bad.save(tmp_path / "r.csv")
    bad.save(tmp_path / "r.md")
    assert "'=1+1" in (tmp_path / "r.csv").read_text()
    assert "a\\|b&lt;script&gt;" in (tmp_path / "r.md").read_text()
    assert bad.plot("confusion").axes


def test_from_the_posterior_of_a_weighing(models):
    rng = np.random.default_rng(3)
    data = {**BAGS, "grams": 5.0 + rng.standard_normal(8)}
    weighing = ev.weigh(models, data, depth="none")
    found = quietly(models, BAGS, repeats=60, from_posterior=weighing, depth="none")
    # data like the observed ones, whose mean of 5 has no place in the other candidate
    assert found.table()["led"][0] == 1.0
    assert found.calibrated is None
    assert "the calibration is no check" in found.summary
    assert found.table()["settled_right"].sum() == 0.0  # at this depth no error is known


def test_failing_simulations_are_named_and_the_rest_goes_on():
    bad = shifted("sometimes nan")
    bad.simulate = lambda key, p, data: {"grams": jnp.sqrt(p["mean"]) + 0.0 * data["bag"]}
    found = quietly([bad, nothing()], BAGS, repeats=100, depth="none")
    table = found.table().set_index("generator")
    failed = table.loc["sometimes nan", "simulations_failed"]
    assert 20 < failed < 80
    assert table.loc["sometimes nan", "data_sets"] == 100 - failed
    assert table.loc["nothing", "data_sets"] == 100
    assert len(found.failures) == failed
    assert found.failures[0].parameters.startswith("mean -")
    assert f"{failed} simulations gave nan or inf" in found.summary
    assert found.confusion()["data_sets"].sum() == 200 - failed
    hopeless = [shifted("a"), shifted("b")]
    for model in hopeless:
        model.simulate = lambda key, p, data: {"grams": jnp.nan * data["bag"]}
    with pytest.raises(ev.DataError, match="every simulated data set of 8 observations has nan"):
        quietly(hopeless, BAGS, repeats=5)


def test_bad_input_is_refused(models):
    mute = ev.Model("mute", {"mean": Normal(0.0, 1.0)}, shifted().log_likelihood)
    with pytest.raises(ev.DeclarationError, match="'mute' cannot be rehearsed; got no simulate="):
        quietly([shifted(), mute], BAGS, repeats=5)
    for repeats in (0, -3, 2.5, True):
        with pytest.raises(ev.DeclarationError, match="repeats must be a whole number from 1 on"):
            quietly(models, BAGS, repeats=repeats)
    with pytest.raises(ev.DeclarationError, match=r"size of a design .* got -20"):
        quietly(models, BAGS, repeats=5, sizes=[10, -20])
    with pytest.raises(ev.DeclarationError, match="at least two candidates; got 'nothing' alone"):
        quietly([nothing()], BAGS, repeats=5)
    with pytest.raises(ev.DeclarationError, match="a posterior of 'shifted'"):
        quietly(models, BAGS, repeats=5, from_posterior={"shiftd": None})


def test_designs_are_thinned_and_repeated():
    assert take_rows(8, 4).tolist() == [1, 3, 5, 7]
    assert take_rows(3, 6).tolist() == [0, 0, 1, 1, 2, 2]
    assert take_rows(5, 5).tolist() == [0, 1, 2, 3, 4]
    assert take_rows(10, 1).tolist() == [5]
    small, large = designs_of([shifted()], BAGS, (4, 16))
    assert small.columns["bag"].tolist() == [1, 3, 5, 7]
    assert small.columns["grid"].tolist() == [0, 1, 2]  # of another length: no rows
    assert large.responses["grams"][0] == (16,)


def test_a_design_may_be_a_function():
    first, second = designs_of([shifted()], lambda n: {"bag": np.linspace(0, 1, n)}, (3, 7))
    assert first.columns["bag"].tolist() == [0.0, 0.5, 1.0]
    assert second.size == 7
    with pytest.raises(ev.DeclarationError, match="a function needs sizes=; got none"):
        designs_of([shifted()], lambda n: {}, None)
    with pytest.raises(ev.DeclarationError, match=r"of 6 observations .* got 3"):
        designs_of([shifted()], lambda n: {"bag": np.arange(3.0)}, (6,))
    with pytest.raises(ev.DataError, match="of 6 observations could not be made; got ZeroDiv"):
        designs_of([shifted()], lambda n: {"bag": 1 / 0}, (6,))


def test_the_responses_of_a_design_are_replaced():
    (design,) = designs_of([shifted()], {**BAGS, "grams": np.full(8, 1e6)}, None)
    assert set(design.columns) == {"bag", "grid"}
    assert design.size == 8


def test_designs_without_rows_and_unlike_responses_are_refused():
    fixed = shifted()
    fixed.simulate = lambda key, p, data: {"grams": Normal(jnp.zeros(5), 1.0).sample(key)}
    with pytest.raises(ev.DeclarationError, match="a row for each observation"):
        designs_of([fixed], BAGS, (10,))
    counts = nothing("counts")
    counts.simulate = lambda key, p, data: {"frogs": Poisson(1.0 + data["bag"]).sample(key)}
    with pytest.raises(ev.DeclarationError, match="simulate the same columns in the same shape"):
        designs_of([shifted(), counts], BAGS, None)


@pytest.mark.parametrize("given", [0, [0], [1.5], [], "40", [True]])
def test_sizes_that_are_none_are_refused(given):
    with pytest.raises(ev.DeclarationError, match="size"):
        checked_sizes(given)


def test_sizes_are_sorted_and_each_once():
    assert checked_sizes([40, 10, 40]) == (10, 40)
    assert checked_sizes(7) == (7,)
    assert checked_sizes(None) is None


@pytest.mark.parametrize(("count", "mean"), [(1, 0.5), (20, 0.9), (300, 0.02), (1000, 0.7)])
def test_the_band_is_the_binomials(count, mean):
    exact = stats.binom(count, mean)
    for hits in (0, int(count * mean), count):
        low, high, chance = binomial_band(count, mean, hits)
        assert (low, high) == (exact.ppf(0.025), exact.ppf(0.975))
        wanted = min(1.0, 2 * min(exact.cdf(hits), exact.sf(hits - 1)))
        assert chance == pytest.approx(wanted, rel=1e-6, abs=1e-12)


def test_bins_count_what_falls_into_them():
    bins = calibrate(np.array([0.05, 0.06, 0.75, 1.0, np.nan]), np.array([0, 1, 1, 1, 1], bool))
    assert [(b.low, b.high, b.count, b.right) for b in bins] == [
        (0.05, 0.1, 2, 1), (0.7, 0.8, 1, 1), (0.99, 1.0, 1, 1),
    ]  # fmt: skip


def test_wilsons_interval():
    # 81 of 263: 0.255 to 0.366 (Newcombe 1998, Statistics in Medicine 17:857, table I, method 3;
    # from memory)
    assert wilson(81, 263) == pytest.approx((0.2553, 0.3662), abs=5e-5)
    assert wilson(0, 10)[0] == 0.0
    assert wilson(10, 10)[1] == 1.0


def test_the_size_is_read_off_between_two():
    # 0.8 lies halfway between 0.7 and 0.9, and 20 halfway between 10 and 40 in the log
    assert size_for(0.8, (10, 40), (0.7, 0.9))["size"] == 20
    assert size_for(0.8, (10, 40), (0.85, 0.9))["bound"] == "at most"
    assert size_for(0.8, (10, 40), (0.5, 0.7))["bound"] == "more than"
    # a dip below counts: from there on it must stay
    assert size_for(0.8, (10, 20, 40), (0.9, 0.7, 0.9))["size"] == 29


STUDY = '''"""Does a bag lose anything?

Invented data of the fictional Lowmere reed-bed station.
"""
import numpy as np
import evidence as ev
from evidence.distributions import Normal


def one(name, priors):
    def bags(p, data):
        return Normal(p.get("mean", 0.0) + 0.0 * data["bag"], 1.0)

    return ev.Model(name, priors, lambda p, data: bags(p, data).log_prob(data["grams"]),
                    simulate=lambda key, p, data: {"grams": bags(p, data).sample(key)})


def models():
    return [one("nothing", {}), one("shifted", {"mean": Normal(0.0, 1.0)})]


def data(path=None):
    return {"bag": np.arange(4.0), "grams": np.array([0.1, 0.4, -0.3, 0.2])}
'''


@pytest.fixture
def study(tmp_path):
    path = tmp_path / "bags.py"
    path.write_text(STUDY)
    return str(path)


@pytest.mark.slow
def test_the_command_rehearses_a_study_and_goes_on_from_its_store(study, tmp_path):
    pytest.importorskip("pyarrow")
    out, store = tmp_path / "r.json", tmp_path / "store"
    command = ["rehearse", study, "--repeats", "40", "--sizes", "4,8", "--seed", "3",
               "--depth", "none", "--save", str(out), "--store", str(store)]  # fmt: skip
    done = CliRunner().invoke(main, command)
    assert done.exit_code == 0, done.output
    assert "With 8 observations the candidate that made the data led in" in done.output
    first = json.loads(out.read_text())
    assert first["sizes"] == [4, 8]
    kept = {p: p.stat().st_mtime_ns for p in store.rglob("*.parquet")}
    assert kept
    assert CliRunner().invoke(main, [*command, "--quiet"]).exit_code == 0
    assert json.loads(out.read_text()) == first
    assert {p: p.stat().st_mtime_ns for p in store.rglob("*.parquet")} == kept


@pytest.mark.parametrize(
    ("options", "message"),
    [
        ([], "Missing option '--repeats'"),
        (["--repeats", "0"], "0 is not in the range"),
        (["--repeats", "5", "--sizes", "10,-20"], "sizes are whole numbers from 1 on"),
        (["--repeats", "5", "--sizes", "ten"], "sizes are whole numbers from 1 on"),
        (["--repeats", "5", "--save", "x.png"], "a rehearsal is saved by its suffix"),
        (["--repeats", "5", "--only", "nothign"], "Did you mean 'nothing'"),
    ],
)
def test_wrong_usage_of_the_command(study, options, message):
    done = CliRunner().invoke(main, ["rehearse", study, *options])
    assert done.exit_code == 2
    assert message in " ".join(done.output.split())


def test_the_command_needs_two_candidates(study):
    done = CliRunner().invoke(main, ["rehearse", study, "--repeats", "5", "--only", "nothing"])
    assert done.exit_code == 1
    assert "at least two candidates" in done.output
