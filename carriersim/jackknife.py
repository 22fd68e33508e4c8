"""Standard errors of functions of batch totals: delete-one-batch jackknife.

Source: Tukey 1958; Efron, The Jackknife, the Bootstrap and Other Resampling Plans, 1982.
"""

import numpy as np


def jackknife(function, batches):
    """Value and standard error of function(totals).

    batches: dict of arrays whose first axis is the batch; function takes a dict of their sums
    (first axis gone) and returns a dict of arrays or numbers. Returns two dicts (values, errors).
    A quantity that is nan in any replicate has the error nan.
    """
    totals = {key: array.sum(axis=0) for key, array in batches.items()}
    values = function(totals)
    count = next(iter(batches.values())).shape[0]
    mean = {key: np.zeros(np.shape(value)) for key, value in values.items()}
    square = {key: np.zeros(np.shape(value)) for key, value in values.items()}
    with np.errstate(invalid="ignore"):  # replicates may be infinite: their error is nan
        for b in range(count):
            replicate = function({key: totals[key] - batches[key][b] for key in batches})
            for key, value in replicate.items():
                # Differences to the full value: small, so the sum of squares keeps its digits.
                difference = value - values[key]
                mean[key] += difference / count
                square[key] += difference**2 / count
        errors = {
            key: np.sqrt((count - 1) * np.maximum(square[key] - mean[key] ** 2, 0.0))
            for key in values
        }
    return values, errors
