"""What many trials of one process say about the stopping rule."""

from __future__ import annotations

from dataclasses import dataclass
from statistics import median

from scipy.stats import beta

from streaming.calibration.trial import Trial


@dataclass(frozen=True)
class Share:
    """A count out of a number, with its binomial interval."""

    count: int
    number: int

    @property
    def fraction(self) -> float:
        return self.count / self.number if self.number else 0.0

    def interval(self, confidence: float = 0.95) -> tuple[float, float]:
        """Exact two-sided interval.

        References
        ----------
        Clopper & Pearson (1934), Biometrika 26, 404-413.
        """
        tail = (1.0 - confidence) / 2
        k, n = self.count, self.number
        low = 0.0 if k == 0 else float(beta.ppf(tail, k, n - k + 1))
        high = 1.0 if k == n else float(beta.ppf(1.0 - tail, k + 1, n - k))
        return low, high


@dataclass(frozen=True)
class Summary:
    """Figures of one process.

    Attributes
    ----------
    false_stops, naive_false_stops : out of all trials that stopped
    coverage : bounds that the truth kept, out of all bounds past gathering
    ratio : median over the trials of stop over oracle
    lasting_ratio : the same over the length from which on the modes stayed within tolerance
    """

    n_trials: int
    n_stopped: int
    false_stops: Share
    naive_false_stops: Share
    coverage: Share
    median_stop: float | None
    ratio: float | None
    lasting_ratio: float | None


def summarise(trials: list[Trial]) -> Summary:
    """Sum up the trials of one process."""
    stopped = [trial for trial in trials if trial.stop is not None]
    naive = [trial for trial in trials if trial.naive_stop is not None]
    ratios = [t.stop / t.oracle for t in stopped if t.stop is not None and t.oracle is not None]
    lasting = [t.stop / t.lasting for t in stopped if t.stop is not None and t.lasting is not None]
    return Summary(
        n_trials=len(trials),
        n_stopped=len(stopped),
        false_stops=Share(sum(t.false_stop for t in stopped), len(stopped)),
        naive_false_stops=Share(sum(t.naive_false for t in naive), len(naive)),
        coverage=Share(sum(t.covered for t in trials), sum(t.n_bounds for t in trials)),
        median_stop=median(t.stop for t in stopped if t.stop is not None) if stopped else None,
        ratio=median(ratios) if ratios else None,
        lasting_ratio=median(lasting) if lasting else None,
    )
