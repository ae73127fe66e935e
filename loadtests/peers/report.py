"""Tables and plots of the figures."""

from pathlib import Path
from typing import Any

from rich.console import Console
from rich.table import Table

from loadtests.peers.side_by_side import COLD, FLOOR, WARM

PEERS = ("Redis alone, ZUNIONSTORE", "PostgreSQL, one SELECT")


def ratios(figures: dict[str, Any]) -> list[tuple[str, float | None, str]]:
    """Give each target's figure: what, how much, what was aimed at."""
    rows, http = figures["reads"]["rows"], figures["reads"]["http"]
    found: list[tuple[str, float | None, str]] = []
    for peer in PEERS:
        for way, target in ((COLD, "at least 12"), (WARM, "at least 30")):
            ratio = rows[peer]["p50_us"] / rows[way]["p50_us"] if rows.get(peer) else None
            found.append((f"{peer} / {way}", ratio, target))
    found.append((f"{COLD} / {FLOOR}", rows[COLD]["p50_us"] / rows[FLOOR]["p50_us"], "at most 2.0"))
    found.append(("CPU of a read over HTTP / floor's time", http["cpu_us"] / rows[FLOOR]["p50_us"], "at most 1.5"))
    by_ties = {row["ties"]: row for row in figures["growth"] if row["edges"] == 60 * row["ties"]}
    if 300 in by_ties and 3_000 in by_ties:
        per_edge = [by_ties[ties]["cold_us"] / by_ties[ties]["edges"] for ties in (300, 3_000)]
        found.append(("cost per edge, 3,000 ties / 300 ties, cold", per_edge[1] / per_edge[0], "at most 1.1"))
    ingest = {row["batch"]: row["events_per_s"] for row in figures["ingest"]}
    found.append(("ingest over HTTP in batches of 500, events a second", ingest.get(500), "at least 15,000"))
    found.append(("import, events a second", figures["import"]["events_per_s"], "at least 60,000"))
    found.append(("import, peak memory, MiB", figures["import"]["peak_mib"], "under 1,024"))
    found.append(("memory, bytes an edge, rows", figures["memory"]["bytes_per_edge_of_rows"], "at most 28"))
    found.append(("memory, bytes a post with its sums", figures["memory"]["bytes_per_post"], "at most 450"))
    return found


def show(figures: dict[str, Any]) -> None:
    """Print the tables."""
    console = Console()
    reads = figures["reads"]
    table = Table(title=f"One read: {reads['edges']:,} edges, {reads['candidates']:,} candidates (microseconds)")
    for column in ("way", "median", "least", "p90", "times the floor"):
        table.add_column(column, justify="left" if column == "way" else "right")
    floor_us = reads["rows"][FLOOR]["p50_us"]
    for name, row in reads["rows"].items():
        cells = ["not available", "", "", ""]
        if row:
            cells = [f"{row[key]:,.0f}" for key in ("p50_us", "least_us", "p90_us")] + [
                f"{row['p50_us'] / floor_us:.2f}"
            ]
        table.add_row(name, *cells)
    http = reads["http"]
    table.add_row(
        "waxwane over HTTP, warm rows",
        f"{http['p50_us']:,.0f}",
        "",
        f"p99 {http['p99_us']:,.0f}",
        f"{http['p50_us'] / floor_us:.2f}",
    )
    console.print(table)
    console.print(f"all scores agree: {', '.join(reads['agreed'])}")
    _show_rows(console, "Reads as worlds grow", figures["growth"])
    _show_rows(console, "Ingest over HTTP", figures["ingest"])
    memory = figures["memory"]
    rows = [{"key": name, "bytes": size} for name, size in memory["by_key"].items()]
    _show_rows(console, f"Memory: {memory['edges']:,} edges of {memory['people']:,} people", rows)
    single = figures["single_event"]
    console.print(f"one event a call over HTTP: p50 {single['p50_ms']:.2f} ms, p99 {single['p99_ms']:.2f} ms")
    targets = Table(title="Targets")
    for column in ("figure", "here", "target"):
        targets.add_column(column, justify="left" if column == "figure" else "right")
    for name, value, target in ratios(figures):
        targets.add_row(name, "not available" if value is None else f"{value:,.2f}", target)
    console.print(targets)


def _show_rows(console: Console, title: str, rows: list[dict[str, Any]]) -> None:
    table = Table(title=title)
    for column in rows[0]:
        table.add_column(column, justify="right")
    for row in rows:
        table.add_row(*(value if isinstance(value, str) else f"{value:,.0f}" for value in row.values()))
    console.print(table)


def plot(figures: dict[str, Any], folder: Path) -> None:
    """Draw how reads and ingest grow, as SVG."""
    import matplotlib as mpl  # noqa: PLC0415  only where plots are wanted

    mpl.use("svg")
    from matplotlib import pyplot as plt  # noqa: PLC0415  after the choice above

    rows = figures["growth"]
    figure, (left, right) = plt.subplots(1, 2, figsize=(10, 4), layout="constrained")
    for axes, chosen, key, label in (
        (left, [row for row in rows if row["edges"] == 60 * row["ties"]], "ties", "ties of the reader, 60 edges each"),
        (right, [row for row in rows if row["ties"] == 300], "edges", "edges of 300 ties together"),
    ):
        chosen.sort(key=lambda row: row[key])
        for name, mark in (("cold_us", "o"), ("warm_us", "s")):
            axes.loglog([row[key] for row in chosen], [row[name] / 1000 for row in chosen], marker=mark, label=name[:4])
        axes.set_xlabel(label)
        axes.set_ylabel("one read, median, milliseconds")
        axes.grid(visible=True, which="both", alpha=0.3)
        axes.legend(title="rows")
    figure.savefig(folder / "reads.svg")
    figure, axes = plt.subplots(figsize=(5, 4), layout="constrained")
    axes.semilogx(
        [row["batch"] for row in figures["ingest"]], [row["events_per_s"] for row in figures["ingest"]], marker="o"
    )
    axes.set_xlabel("events in a call")
    axes.set_ylabel("events a second over HTTP")
    axes.grid(visible=True, alpha=0.3)
    figure.savefig(folder / "ingest.svg")
