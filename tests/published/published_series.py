"""Series that have exactly the deviation and the correlation that a worked example starts from."""

import numpy as np

SESSIONS = 500


def with_deviation(sigma: float) -> np.ndarray:
    """Scenarios of mean 0 whose standard deviation (n - 1) is sigma."""
    pattern = np.tile([1.0, -1.0], SESSIONS // 2)
    return sigma * pattern * np.sqrt((SESSIONS - 1) / SESSIONS)


def correlated(sigma: float, other_sigma: float, correlation: float) -> tuple[np.ndarray, np.ndarray]:
    """Two series of mean 0 with those deviations (n - 1) and that correlation."""
    first = with_deviation(1.0)
    apart = np.tile([1.0, 1.0, -1.0, -1.0], SESSIONS // 4) * np.sqrt((SESSIONS - 1) / SESSIONS)
    second = correlation * first + np.sqrt(1 - correlation**2) * apart
    return sigma * first, other_sigma * second
