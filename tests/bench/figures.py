"""What a benchmark found, and how it is printed."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass, field

from measure import Cost, median_cost


@dataclass
class Figures:
    """What the benchmark found: rows of both tables, and whether the answers agree."""

    rows: list[tuple[str, str, str, str]] = field(default_factory=list)
    costs: list[tuple[str, str, int, Cost]] = field(default_factory=list)
    answers: list[tuple[str, bool]] = field(default_factory=list)

    def compare(self, what: str, got: float, most: float | None = None, least: float | None = None) -> None:
        """Note a ratio beside what was wanted of it."""
        wanted = "" if most is least is None else f"≤ {most:.3g} ×" if most is not None else f"≥ {least:.3g} ×"
        well = got <= most if most is not None else least is None or got >= least
        self.rows.append((what, wanted, f"{got:.3g} ×", ("yes" if well else "no") if wanted else ""))

    def cost(self, log: str, who: str, rows: int, costs: Sequence[Cost]) -> Cost:
        """Note the medians of some runs, and return them."""
        middle = median_cost(costs)
        self.costs.append((log, who, rows, middle))
        return middle


def millions(n: int) -> str:
    """Write a number of rows or customers."""
    return f"{n / 1e6:g} M"


def table(heads: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """Return a Markdown table."""
    lines = [heads, ["---"] * len(heads), *rows]
    return "\n".join(f"| {' | '.join(line)} |" for line in lines)


def report(about: dict[str, str], found: Figures) -> str:
    """Return the whole as Markdown."""
    costs = [
        (log, who, f"{c.seconds:.2f}", f"{c.cpu_seconds:.2f}", f"{c.peak_mib:,.0f}",
         f"{rows / c.seconds / 1e6:.2f}" if rows else "")
        for log, who, rows, c in found.costs
    ]  # fmt: skip
    return "\n\n".join(
        [
            "; ".join(f"{name} {value}" for name, value in about.items()),
            table(("what", "wanted", "measured", "reached"), found.rows),
            table(("log", "process", "seconds", "CPU seconds", "peak MiB", "M rows per second"), costs),
            table(("answers", ""), [(what, "agree" if same else "DIFFER") for what, same in found.answers]),
        ]
    )
