"""The part of Pauli blocking that is quadratic in what the trial occupation lacks."""

import numpy as np

from carriersim.engine.events import phonon_shift
from carriersim.engine.residual import cumulative


def no_pairs():
    """The source that emits nothing."""
    return {
        "pair": np.ones(1),
        "pair_place": np.zeros(1, np.int32),
        "pair_bin": np.zeros(1, np.int32),
        "pair_kind": np.zeros(1, np.int8),
        "pair_phonon": np.zeros(1, np.int8),
    }


def phonon_pairs(deviation, phonons, axis, paths_nm):
    """Source of pairs, - e_upper e_lower / (2 path) in the lower state, as a list to draw from.

    deviation: (2, B, C) means over half spaces; paths_nm: (C,) lengths of flights across each cell.
    """
    strengths, places, bins, kinds, which = [], [], [], [], []
    for k, energy in enumerate(phonons.phonon_meV):
        whole, shift = phonon_shift(energy, axis.step_meV)
        for late in (0, 1) if shift else (0,):
            above = whole + late
            part = (shift if late else 1.0 - shift) * axis.step_meV
            if above >= axis.bins:
                continue
            for upper in (0, 1):
                for lower in (0, 1):
                    product = -deviation[upper, above:] * deviation[lower, : axis.bins - above]
                    strength = product * (0.5 * phonons.phonon_rate[k] * part * paths_nm)
                    bin_, cell = np.nonzero(strength)
                    value = strength[bin_, cell]
                    strengths.append(np.abs(value))
                    places.append(cell)
                    bins.append(bin_)
                    kinds.append(upper + 2 * lower + 4 * (value < 0.0) + 8 * late)
                    which.append(np.full(value.size, k))
    strength = np.concatenate(strengths) if strengths else np.zeros(0)
    if strength.sum() == 0.0:
        return no_pairs(), 0.0
    return {
        "pair": cumulative(strength),
        "pair_place": np.concatenate(places).astype(np.int32),
        "pair_bin": np.concatenate(bins).astype(np.int32),
        "pair_kind": np.concatenate(kinds).astype(np.int8),
        "pair_phonon": np.concatenate(which).astype(np.int8),
    }, float(strength.sum())
