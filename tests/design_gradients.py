"""Central differences of a response along a random direction: a V over the step."""

import numpy as np

STEPS = tuple(10.0 ** np.arange(-2.5, -6.1, -0.5))


def smallest_error(unknowns, response, physics, *, seed=2, steps=STEPS, x=None):
    """Least relative error of central differences of `response`, its value at x, and its slope.

    What responses remember between designs (a correction to the true maximum) is held.
    """
    rng = np.random.default_rng(seed)
    x = rng.uniform(0.25, 0.75, unknowns.n) if x is None else x
    direction = rng.uniform(-1, 1, unknowns.n)
    physics.update(unknowns.forward(x))
    response.value(physics)
    kept = physics.warm_state()

    def at(y):
        physics.restore(kept)
        physics.update(unknowns.forward(y))
        return response.value(physics)

    value, slopes = at(x)
    slope = float(unknowns.transpose(physics.fields, slopes) @ direction)
    errors = []
    for step in steps:
        d = (at(x + step * direction)[0] - at(x - step * direction)[0]) / (2 * step)
        errors.append(abs(d - slope) / max(abs(slope), 1e-300))
    return min(errors), value, slope
