"""What one likelihood of the aluminium-on-silicon example costs: CPU time and memory, single process, one thread.

Run with ``python -m pytest -m benchmark tests/benchmarks/test_likelihood_cost.py -s`` to see the figures.
"""

import subprocess
import sys

import pytest

CODE = """
import resource, time
from importlib.resources import files
import numpy as np
import inverse as inv
from inverse.description.sample.stack_file import read_stack

example = files("inverse") / "example"
stack, setup = read_stack(example / "stack.toml")
inversion = inv.Inversion(stack, setup, inv.read_trace(example / "wafer07.csv"))
z = 0.3 * np.random.default_rng(1).standard_normal((256, len(inversion.names)))
inversion.posterior(z)
costs = []
for _ in range(5):
    started = time.process_time()
    inversion.posterior(z)
    costs.append((time.process_time() - started) / len(z))
print(min(costs), resource.getrusage(resource.RUSAGE_SELF).ru_maxrss / 1024)
"""


@pytest.mark.slow
@pytest.mark.benchmark
def test_a_likelihood_takes_under_a_millisecond_and_500_megabytes():
    """441 delays to 110 ps, nine unknowns, two temperatures, correlated noise; batches of 256."""
    done = subprocess.run([sys.executable, "-c", CODE], capture_output=True, text=True, check=True)
    seconds, megabytes = map(float, done.stdout.split())
    print(f"\n{1e3 * seconds:.3f} ms per parameter set, {megabytes:.0f} MB")
    assert seconds < 1e-3
    assert megabytes < 500
