"""The covariance of the river gauges, kept up to date in half the memory.

Run it from the root of the project:

    .venv/bin/python examples/use_from_python.py

The water levels are invented. Kernels are taken from river_gauges.toml, and checked before use.
"""

from pathlib import Path

import numpy as np

from demilune import Kernel, checked, read

GAUGES, HOURS = 24, 500


def levels() -> np.ndarray:
    """Water levels in metres, an hour a row: a common tide, and a part of each gauge's own."""
    generator = np.random.default_rng(1953)
    tide = generator.normal(scale=0.8, size=(HOURS, 1))
    return tide * np.linspace(1.0, 0.2, GAUGES) + generator.normal(scale=0.1, size=(HOURS, GAUGES))


def main() -> None:
    specification = Path(__file__).with_name("river_gauges.toml")
    specs = {(spec.name, spec.language): spec for spec in read(specification).specs}

    def kernel(name: str, language: str = "c") -> Kernel:
        return checked(Kernel(specs[name, language]))

    # The covariance, reading by reading: C := alpha*x*x^T + C, on 300 numbers instead of 576.
    readings = levels()
    deviations = readings - readings.mean(axis=0)
    observe = kernel("gauges_observe_rfp")
    half = observe.to_half(np.zeros((GAUGES, GAUGES)))
    for deviation in deviations:
        observe(half, deviation, alpha=1 / (HOURS - 1))
    error = np.abs(observe.to_full(half, GAUGES) - np.cov(readings.T)).max()
    print(f"{half.size} numbers hold the covariance; numpy.cov differs by {error:.1e}")

    # The variance of the mean of all gauges, and which gauge shares most with it.
    weights = np.full(GAUGES, 1 / GAUGES)
    variance = kernel("gauges_variance_rfp")(half, weights)
    shared = kernel("gauges_spread_rfp_fused_block4")(half, weights)
    print(f"the mean of all gauges has the standard deviation {variance**0.5:.3f} m")
    print(f"gauge {shared.argmax()} shares most with it, gauge {shared.argmin()} least")

    # The same order of arithmetic gives the same bits in both languages; another one need not.
    for loop in ("fused", "dot"):
        name = f"gauges_spread_rfp_{loop}_block1"
        c, python = (kernel(name, language)(half, weights) for language in ("c", "python"))
        same = np.count_nonzero(c == shared)
        print(f"{loop}: C and Python agree in every bit: {c.tobytes() == python.tobytes()}; "
              f"equal to the first product: {same} of {GAUGES}")  # fmt: skip


if __name__ == "__main__":
    main()
