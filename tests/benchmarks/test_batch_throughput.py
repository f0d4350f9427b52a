"""How much more two worker processes do than one: 200 simulated sites, searched and sampled by `inverse.batch`.

Run with ``python -m pytest -m benchmark tests/benchmarks/test_batch_throughput.py -s`` on two idle cores.
Wall-clock times; the pools are warm before the first is taken. All sites go through two processes, every second one
also through one process, in blocks that take turns and change their order, so that what else the machine does falls on
both. Plain counting goes the same ways between them: twice as much on two processes as on one where two cores are idle,
less where they are not, and what is asked of the batch is asked in proportion.
"""

import os
import time

import numpy as np
import pytest
from counting import counts_per_second
from scipy import stats

import inverse as inv
from inverse.inference.mcmc.executor import worker_pool

SITES, BLOCK = 200, 40
SETUP = inv.PumpProbe(pump=400, probe=800, pulse_rms=0.3)
DELAY = np.linspace(-4.0, 46.0, 120)


def stack(thickness, compliance):
    return inv.Stack(
        inv.Layer("Al", thickness=thickness),
        inv.Interface(compliance=compliance, boundary_conductance=120.0),
        inv.Substrate("Si", orientation="100"),
    )


def simulated_sites():
    """Sites of 55 to 65 nm and 5 to 20 GPa/nm with 1 % of white noise; eight clean traces, each with fresh noise."""
    rng, clean = np.random.default_rng(1), []
    for _ in range(8):
        sample = stack(rng.uniform(55, 65), 1 / rng.uniform(5, 20))
        clean.append(inv.simulate(sample, SETUP, DELAY)["reflectance_change"].values)
    traces = {}
    for k in range(SITES):
        signal = clean[k % len(clean)]
        noisy = signal + 0.01 * np.abs(signal).max() * rng.standard_normal(DELAY.size)
        traces[f"s{k:03d}"] = inv.make_trace(DELAY, reflectance_change=noisy)
    return traces


def sites_per_second(recipe, traces, pool):
    started = time.perf_counter()
    found = inv.batch(recipe, traces, seed=1, executor=pool, draws=100, ess=200, starts=1, progress=False)
    taken = time.perf_counter() - started
    assert (found["status"] == "ok").all() and (found["method"] == "importance").all()
    return len(traces) / taken


def gain(rates):
    """Throughput of two processes over that of one, from rates of shape (blocks, 2)."""
    alone, together = 1 / np.mean(1 / rates, axis=0)
    return together / alone


@pytest.mark.slow
@pytest.mark.benchmark
@pytest.mark.skipif((os.cpu_count() or 1) < 2, reason="two processes need two cores")
def test_two_processes_reach_1_7_times_the_throughput_of_one():
    recipe = inv.Recipe(
        stack(stats.uniform(40, 40), stats.halfcauchy(scale=0.05)), SETUP, time_zero=0.0, noise="white"
    )
    traces = simulated_sites()
    names = list(traces)
    rates, counted = np.zeros((2, SITES // BLOCK, 2))
    with worker_pool(1) as one, worker_pool(2) as two:
        pools = (one, two)
        for pool in pools:
            sites_per_second(recipe, {name: traces[name] for name in names[:6]}, pool)
        for row in range(len(rates)):
            block = names[row * BLOCK : (row + 1) * BLOCK]
            for column in (0, 1) if row % 2 == 0 else (1, 0):
                part = {name: traces[name] for name in block[:: 2 - column]}
                rates[row, column] = sites_per_second(recipe, part, pools[column])
                counted[row, column] = counts_per_second(4 * (column + 1), pools[column])
    print(f"\ntwo processes over one: {gain(rates):.2f} of sites, {gain(counted):.2f} of plain counting")
    print(
        f"sites a second: {np.round(1 / np.mean(1 / rates, axis=0), 2)}; by block {np.round(rates, 2).tolist()}"
    )
    assert gain(rates) >= 1.7 * min(gain(counted) / 2, 1)
