"""One shape fitted to a record, and the family of plants that the record cannot tell from it."""

from __future__ import annotations

from dataclasses import dataclass

import numpy as np

from workbench.model.plant import Shape
from workbench.records.certainty import Certainty
from workbench.records.judgement import Judgement
from workbench.records.response import FITTED, Array
from workbench.units import rounded as typed

Several = float | tuple[float, ...]
Interval = tuple[float, float] | tuple[tuple[float, float], ...]


@dataclass(frozen=True)
class Candidate:
    """One shape fitted to the record."""

    shape: str
    plant: Shape
    """In PV units per OP unit and seconds, rounded to six digits."""
    gain: float | None
    """PV units per OP unit; `None` for an integrating shape."""
    slope_per_s: float | None
    """PV units per OP unit and second; `None` for a shape that comes to rest."""
    dead_time_s: float
    time_constants_s: tuple[float, ...]
    """Largest first."""
    standard_errors: dict[str, Several]
    """One standard deviation of `gain` or `slope_per_s`, `dead_time_s`, `time_constants_s` (one
    for each time constant), `numerator_time_s`, `natural_period_s`, `damping`, whichever the shape
    has, from the Fisher information at the optimum; of the dead time that, or what its 95 %
    interval amounts to where that is wider."""
    interval_95: dict[str, Interval]
    """95 % intervals under the same keys: gain and slope by Student's t; times and damping the same
    on a logarithmic scale, or from the profile of the likelihood where that may differ; dead time
    from the profile up to 20 000 rows; numerator time as the ratio that it is."""
    agreement_percent: float
    """100 (1 - norm of residual / norm of PV about its mean)."""
    bic: float
    """Bayesian information criterion, lower is better; comparable within one record."""
    noise_model: str
    """white or correlated."""
    fitted_pv: Array
    """The model's PV at each row (n,), without noise."""
    residual_sd: float
    """Standard deviation of the noise [PV units]."""
    certainty: Certainty
    """Estimates, correlation and the profile of the dead time, in one order."""
    judgement: Judgement
    """What the fit leaves over, and the gain of each move."""
    noise_time_s: float | None = None
    """Time over which correlated noise forgets itself [s]; `None` for white noise."""
    drift_per_s: float = 0.0
    """Drift found beside the answer to OP [PV units per s]; the largest of several parts."""
    natural_period_s: float | None = None
    damping: float | None = None
    numerator_time_s: float | None = None

    @property
    def level(self) -> float:
        """Gain, or slope per second."""
        return self.gain if self.gain is not None else self.slope_per_s or 0.0

    @property
    def level_error(self) -> float:
        """Standard error of `level`."""
        return float(self.certainty.errors[0])

    def family(self, count: int, seed: int = 0) -> tuple[Shape, ...]:
        """Plants of this shape that the record cannot tell apart from the best.

        Parameters
        ----------
        count
            How many.
        seed
            The same seed makes the same plants.

        Returns
        -------
        tuple
            Plants in PV units per OP unit and seconds, each as likely as its place in the
            distribution: 95 of 100 have any one value within its 95 % interval.

        Notes
        -----
        Normal deviates with the correlation found; each value is carried as far up or down as its
        own interval reaches on that side, so that a lopsided interval makes a lopsided family.
        Values that cannot be negative are carried on a logarithmic scale; a dead time is 0 at least
        and the sign of the gain is kept.
        """
        known, shape = self.certainty, FITTED[self.shape]
        dice = np.random.default_rng(seed)
        size, turned = np.linalg.eigh(known.correlation)
        root = turned * np.sqrt(np.maximum(size, 0.0))
        plants: list[Shape] = []
        while len(plants) < count:
            values = _carried(known, root @ dice.standard_normal(len(root)), shape.terms)
            if values[0] * known.estimates[0] <= 0.0:
                continue
            first, late = shape.terms, max(float(values[-1]), 0.0)
            lead = float(values[1]) if shape.terms == 2 else 0.0
            own = values[first:-1].tolist()
            if shape.two_lags:
                own.sort(reverse=True)
            elif "damping" in shape.names:
                own[1] = min(own[1], 0.999)
            plants.append(
                shape.make(
                    typed(float(values[0])),
                    tuple(map(typed, own)),
                    typed(lead),
                    typed(late),
                )
            )
        return tuple(plants)


def _carried(known: Certainty, deviates: Array, terms: int) -> Array:
    """Values at normal deviates, each side as far as its own interval reaches."""
    values = known.estimates.copy()
    for i, z in enumerate(deviates.tolist()):
        end = known.high[i] if z > 0 else known.low[i]
        share = abs(z) / 1.96
        if i < terms or known.names[i] == "dead_time_s":
            # A ratio without an end is carried by its standard error.
            reach = end - values[i] if abs(end) < 1e99 else 1.96 * known.errors[i] * np.sign(z)
            values[i] += share * reach
        else:
            factor = min(max(end / values[i], 1e-3), 1e3)
            values[i] *= factor**share
    return values


def rounded(value: float) -> float:
    """Six digits: far below any standard error, and fit for a case file."""
    return float(f"{value:.6g}")
