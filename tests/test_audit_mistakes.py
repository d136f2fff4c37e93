"""Every planted mistake is caught, by name and in words; no correct density is accused, at any scale."""

import audit_cases
import cloudpickle
import numpy as np
import pytest

import fellwalk as fw
from fellwalk import errors
from fellwalk.audit import glance
from fellwalk.starts import starting_points


def one_line(found):
    return " ".join(str(found).split())


@pytest.mark.parametrize("name", audit_cases.PLANTED)
def test_planted_mistake(name):
    planted = audit_cases.PLANTED[name]
    found = fw.audit(planted.make())
    assert not found.ok
    said = one_line(found)
    assert any(word in said for word in planted.words), said
    if planted.names is not None:
        assert any(planted.names in mistake.where for mistake in found.mistakes), found.mistakes
    assert said.endswith("found.")
    assert not said.endswith("No mistake found.")


@pytest.mark.parametrize("scale", audit_cases.SCALES)
@pytest.mark.parametrize("name", audit_cases.CORRECT)
def test_no_false_alarm(name, scale):
    """Neither a mistake nor a caution, and the gradient was really compared: at five points, to six digits or more."""
    found = fw.audit(audit_cases.CORRECT[name](scale))
    assert [f for f in found.findings if f.weight != "note"] == []
    assert found.ok
    assert len(found.points) >= 5
    assert found.compared == found.dimension
    assert found.largest_share < 1e-5
    assert one_line(found).endswith("No mistake found.")


@pytest.mark.parametrize("seed", range(1, 4))
@pytest.mark.parametrize("name", audit_cases.CORRECT)
def test_no_false_alarm_at_other_points(name, seed):
    assert fw.audit(audit_cases.CORRECT[name](audit_cases.SCALES[seed]), seed=seed).ok


def test_a_compiled_density_that_is_right():
    found = fw.audit(audit_cases.compiled_normal())
    assert found.ok
    assert "function" not in found.seconds


# ---- how small a mistake is seen -----------------------------------------------------------------------------------


@pytest.mark.parametrize(("size", "weight"), [(3e-3, "mistake"), (1e-5, "caution"), (0.0, None)])
def test_small_errors_are_told_from_rounding(size, weight):
    """A gradient off by a share of `size`, in a log density whose own rounding is 1e-12: three digits refuse,
    five warn."""
    def f(x):
        return 1e4 - 0.5 * float(x @ x), -x * [1.0, 1.0 + size]

    found = fw.audit(fw.Density(f, 2, start=[0.7, -1.3]))
    weights = {finding.weight for finding in found.findings}
    assert weights == ({weight} if weight else set())


@pytest.mark.parametrize("seed", range(8))
@pytest.mark.parametrize("digits", [1e-6, 1e-3])
def test_noise_is_not_taken_for_a_mistake(digits, seed):
    """A log density with noise that depends on the position alone, as of a solver with a tolerance."""
    def f(x):
        own = np.random.default_rng(list(x.tobytes()))
        return -0.5 * float(x @ x) + digits * own.standard_normal(), -x

    found = fw.audit(fw.Density(f, 3, start=[0.7, -1.3, 0.4]), seed=seed)
    assert found.ok
    assert any(finding.about == "precision" and "noisy" in finding.text for finding in found.findings)


@pytest.mark.parametrize("d", [301, 2000])
def test_one_wrong_entry_among_many(d):
    """Beyond 300 coordinates groups are compared, and the wrong entry is still found and named, wherever it is."""
    for place in (0, 137, d - 2):
        def f(x, place=place):
            g = -x / 4.0
            g[place] *= 2
            return -0.125 * float(x @ x), g

        start = 0.5 + np.random.default_rng(d).random(d)
        found = fw.audit(fw.Density(f, d, start=start))
        assert [mistake.where for mistake in found.mistakes] == [f"x[{place}]"]
        with pytest.raises(errors.AuditError, match=rf"x\[{place}\]"):
            fw.run(fw.Density(f, d, start=start), chains=1, keep=4, settle=5, progress="off")


# ---- what a run does -----------------------------------------------------------------------------------------------


@pytest.mark.parametrize("name", [n for n, planted in audit_cases.PLANTED.items() if planted.small])
def test_a_run_refuses_a_wrong_gradient(name, tmp_path):
    density = audit_cases.PLANTED[name].make()
    record = tmp_path / "refused.fell"
    with pytest.raises(errors.AuditError, match=r"audit=False runs it all the same\.$") as caught:
        fw.run(density, keep=4, chains=2, settle=5, seed=1, record=record, progress="off")
    assert any(word in str(caught.value) for word in audit_cases.PLANTED[name].words)
    assert not record.exists()


@pytest.mark.parametrize("name", ["wrong sign", "missing Jacobian", "wrong variable"])
def test_a_run_without_audit_goes_on(name):
    result = fw.run(audit_cases.PLANTED[name].make(), keep=4, chains=2, settle=5, seed=1, audit=False, progress="off")
    assert result.draws.shape[:2] == (2, 4)


@pytest.mark.parametrize("name", audit_cases.CORRECT)
def test_a_run_of_a_correct_density_is_not_refused(name):
    """At each of twenty starts, for sixteen gradients or fewer as a rule, and never more than forty."""
    density, spent = audit_cases.CORRECT[name](1.0), []
    for seed in range(5):
        for y in starting_points(density, density.start, 4, np.random.default_rng(seed)):
            before = density.gradients
            glance(density, y)
            spent.append(density.gradients - before)
    assert np.median(spent) <= 16
    assert max(spent) <= 40


def test_draws_do_not_depend_on_the_audit():
    runs = [fw.run(audit_cases.CORRECT["logistic"](1.0), keep=20, chains=2, settle=20, seed=3, audit=audit,
                   progress="off")
            for audit in (True, False)]
    np.testing.assert_array_equal(runs[0].draws, runs[1].draws)


def test_an_audit_travels():
    found = fw.audit(audit_cases.PLANTED["factor two"].make())
    assert str(cloudpickle.loads(cloudpickle.dumps(found))) == str(found)
