"""Three times every sample."""

import numpy as np


def early_read(x):
    return x.astype(np.int32) * 3
