"""Criteria of model order, from the mean squared residual V, p parameters and N samples.

FPE and AIC after H. Akaike 1969 and 1974, BIC after G. Schwarz 1978, AICc after C. M. Hurvich and
C.-L. Tsai, Biometrika 76, 1989 (from memory): here AICc = AIC + 2 p (p + 1) / (N - p - 1), the
noise variance not counted among the parameters.
"""

import math


def criteria(loss: float, p: int, n: int) -> dict[str, float]:
    """Return fpe, aic, aicc, bic and mdl.

    Args:
        loss: mean squared residual V (determinant of its matrix for several outputs).
        p: number of parameters.
        n: number of samples, above p + 1 for finite values.
    """
    fit = n * math.log(loss) if loss > 0 else -math.inf
    aic = fit + 2 * p
    room = n - p - 1
    return {
        "fpe": loss * (n + p) / (n - p) if n > p else math.inf,
        "aic": aic,
        "aicc": aic + 2 * p * (p + 1) / room if room > 0 else math.inf,
        "bic": fit + p * math.log(n),
        "mdl": loss * (1 + p * math.log(n) / n),
    }
