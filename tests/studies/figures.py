"""Lines of measured figures beside their targets, shared by the studies."""

import numpy as np


def robust_width(values):
    """Return half the span of the central 68.3 %, and its standard error."""
    values = np.asarray(values, float)
    if values.size < 3:
        return np.nan, np.nan
    low, high = np.percentile(values, [15.87, 84.13])
    # Of a normal sample of n, the half-span scatters by 0.93 / sqrt(n) of itself.
    return 0.5 * (high - low), 0.93 * 0.5 * (high - low) / np.sqrt(values.size)


def fraction(hits):
    """Return a fraction of True, nan for none at all."""
    hits = list(hits)
    return float(np.mean(hits)) if hits else np.nan


class Table:
    """Lines of measured figures beside their targets."""

    def __init__(self):
        self.missed = 0

    def line(self, name, value, text, ok):
        """Print one line."""
        verdict = "n/a" if not np.isfinite(value) else "ok" if ok else "MISS"
        self.missed += verdict == "MISS"
        print(f"{name:<52}{text:>30}   {verdict}")

    def at_most(self, name, values, limit, unit, *, statistic=np.median):
        """Print a line that must not exceed a limit."""
        values = [v for v in values if np.isfinite(v)]
        value = float(statistic(values)) if values else np.nan
        text = f"{value:.4g} {unit} (<= {limit:g}, n {len(values)})"
        self.line(name, value, text, value <= limit)

    def at_least(self, name, hits, limit):
        """Print a line that must reach a fraction."""
        hits = list(hits)
        value = fraction(hits)
        self.line(
            name,
            value,
            f"{100 * value:.1f} % of {len(hits)} (>= {100 * limit:g})",
            value >= limit,
        )

    def pull(self, name, values):
        """Print a line whose robust width must be 0.8-1.25."""
        values = [v for v in values if np.isfinite(v)]
        width, err = robust_width(values)
        text = f"{width:.2f} +- {err:.2f} (0.8-1.25, n {len(values)})"
        self.line(name, width, text, 0.8 <= width <= 1.25)
