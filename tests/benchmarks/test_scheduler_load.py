"""What the scheduler costs a task, and the simulation of a study beside what can be run here."""

import pytest

from tests.benchmarks.scheduler_load import Measured, simulate

pytestmark = pytest.mark.benchmark


def test_without_costs_only_the_start_and_the_end_are_idle():
    found = simulate(50, 20_000, scheduler=0.0, client=0.0)
    assert found.idle < 1e-9
    assert found.scheduler == found.client == 0.0
    assert found.seconds == pytest.approx(60.0 * 20_000 / 50, rel=0.05)


def test_a_scheduler_that_is_too_slow_sets_the_pace():
    found = simulate(1_000, 50_000, scheduler=0.1, client=0.001)
    assert found.scheduler > 0.95
    # Beside its own work there are only the last tasks.
    assert 0.1 * 50_000 <= found.seconds <= 0.1 * 50_000 + 12 * 60


def test_simulated_and_real(report):
    with Measured(workers=8) as measured:
        threads = measured.cluster.threads()
        assert threads == 8
        loads = [measured.run(1_500, in_flight=in_flight) for in_flight in (16, 64, 1_000)]
        costs = {"scheduler": loads[0].scheduler, "client": loads[0].client}
        # All share the few cores of this machine: shorter tasks would wait for them, not for the scheduler.
        for seconds, tasks in ((0.2, 600), (0.4, 300)):
            real = measured.run(tasks, in_flight=2 * threads, seconds=seconds)
            model = simulate(threads, tasks, mean=seconds, **costs)
            report(
                f"{threads} threads, tasks of {seconds} s: {tasks / real.seconds:.1f} a second, "
                f"simulated {tasks / model.seconds:.1f}"
            )
            assert model.seconds == pytest.approx(real.seconds, rel=0.25)
    for load in loads:
        report(str(load))
    million = simulate(3_000, 1_000_000, **costs)
    report(f"a million tasks of a minute: {million}")
    assert million.idle < 0.05
