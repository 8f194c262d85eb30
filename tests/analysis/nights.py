"""Made-up nights as columns, with every number known: invented data for tests."""

from typing import Any

import numpy as np

HOLDS = np.geomspace(0.25, 64, 12)


def night(
    seed: int,
    *,
    packets: int = 9,
    holds: np.ndarray = HOLDS,
    coherence_s: float = 20.0,
    lifetime_s: float = 30.0,
    contrast: float = 0.5,
    atoms: float = 12000.0,
    phases: int = 4,
    drift: float = 0.1,
    phase_noise: float = 0.0,
    load_scatter: float = 0.08,
    detector: float = 15.0,
) -> dict[str, Any]:
    """Columns of a night of packets in random order, phases shuffled in each, drifting atoms and phase.

    `phase_noise` is rad per root second of hold, shot to shot; it shortens the coherence time to
    1 / (1/coherence_s + phase_noise^2 / 2). `detector` is atoms of noise on each output.
    """
    rng = np.random.default_rng(seed)
    order = rng.permutation(np.repeat(np.arange(len(holds)), packets))
    count = len(order)
    hold = np.repeat(holds[order], phases)
    theta = np.concatenate([rng.permutation(phases) * 2 * np.pi / phases for _ in range(count)])
    start = np.concatenate([[0.0], np.cumsum(hold + 3)[:-1]])
    shots = len(start)
    walk = np.cumsum(rng.standard_normal(shots)) / np.sqrt(shots)
    mean = atoms * np.exp(-hold / lifetime_s + drift * walk + load_scatter * rng.standard_normal(shots))
    wander = 2 * np.sin(5 * start / start[-1])
    phi = wander + phase_noise * np.sqrt(hold) * rng.standard_normal(shots)
    side = np.repeat(rng.choice([-1, 1], count), phases)
    p = 0.5 + 0.5 * contrast * np.exp(-hold / coherence_s) * np.cos(phi + theta + 0.01 * side)
    detected = rng.poisson(mean)
    a = rng.binomial(detected, p)
    noise = detector * rng.standard_normal((2, shots))
    zeros = np.zeros(shots, dtype=int)
    return {
        "key": np.array([f"key-{i}" for i in range(shots)]),
        "position": np.arange(shots),
        "request": zeros,
        "shot": np.arange(shots),
        "kind": zeros,
        "packet": np.repeat(np.arange(count), phases),
        "cell": np.repeat(order, phases),
        "repeat": zeros,
        "unit": np.repeat(np.arange(count), phases),
        "hold_s": hold,
        "phase_rad": theta,
        "start_s": start,
        "mid_s": start + hold / 2,
        "duration_s": hold + 3,
        "state": np.full(shots, "done", dtype="U9"),
        "atoms_a": a + noise[0],
        "atoms_b": detected - a + noise[1],
        "background": np.full(shots, 100.0),
        "saturated": np.zeros(shots),
        "flags": np.full(shots, "", dtype="U40"),
        "switch_collar": side.astype(np.int8),
        "setting_hold": hold,
        "setting_readout": theta,
        "setting_depth": np.full(shots, 9.0),
    }
