"""What the bench found, as text and as plain data for JSON."""

from typing import Any

from attrs import asdict

from afterkick.bench import Bench
from afterkick.bench.bench import BLOCK, Bytes, Difference, Instructions, Spread
from afterkick.report.formulas import counted, number
from afterkick.report.layout import row
from afterkick.verdict import BudgetLine

__all__ = ["bench_data", "bench_text", "instructions_line"]


def instructions_line(limit: float | None, found: Bench) -> BudgetLine | None:
    """The budget line ``instructions``, judged; None where the design has none."""
    if limit is None:
        return None
    if found.instructions is None:
        return BudgetLine("instructions", limit, None, f"nothing is counted on {found.target}")
    return BudgetLine("instructions", limit, found.instructions.step.highest, "the most in one call of step")


def bench_text(name: str, found: Bench, line: BudgetLine | None) -> str:
    """At most half a screen."""
    lines = [f"{name} on {found.target}: {_verdict(found, line)}", "", row("compiler", found.compiler)]
    if found.equal is not None:
        lines.append(row("compared", _compared(found)))
    if found.first_difference is not None:
        lines += [row(*labelled) for labelled in _difference(found.first_difference)]
        if found.selftest == -2:
            lines.append(row("", "the self-test returns -2: products are fused with sums, or held wider than singles"))
    if found.instructions is not None:
        lines += _instructions(found.instructions)
    lines.append(row("bytes", _bytes(found.bytes)))
    if line is not None:
        word = {True: "holds", False: "FALLS SHORT", None: "not judged"}[line.holds]
        figure = "" if line.found is None else f"{number(line.found)} "
        lines.append(row("budget", f"{line.item} {figure}of {number(line.limit)}: {word} ({line.remark})"))
    return "\n".join(lines)


def bench_data(name: str, found: Bench, line: BudgetLine | None) -> dict[str, Any]:
    """One JSON object."""
    instructions = found.instructions
    return {
        "design": name,
        "target": found.target,
        "compiler": found.compiler,
        "equal": found.equal,
        "lacking": found.lacking or None,
        "samples": found.samples,
        "selftest": found.selftest,
        "first_difference": None if found.first_difference is None else asdict(found.first_difference),
        "instructions": None if instructions is None else {**asdict(instructions), "block": BLOCK},
        "bytes": asdict(found.bytes),
        "budget": None
        if line is None
        else {"item": line.item, "limit": line.limit, "found": line.found, "holds": line.holds, "remark": line.remark},
    }


def _verdict(found: Bench, line: BudgetLine | None) -> str:
    if found.equal is None:
        return f"NOT RUN: {found.lacking}"
    if not found.equal:
        return "DIFFERENT from the simulator"
    return "equal, but instructions fall short" if line is not None and line.holds is False else "equal"


def _compared(found: Bench) -> str:
    if not found.equal:
        return "up to the first difference"
    return (
        f"{found.samples} samples by single calls and again in blocks of 0 to 128, every output and the memory after "
        "each stimulus; the self-test returns -1"
    )


def _difference(difference: Difference) -> list[tuple[str, str]]:
    where = f"{difference.call} calls, stimulus: {difference.stimulus}"
    if difference.fault:
        return [("different", where), ("", difference.fault)]
    if difference.call == "selftest":
        return [("different", f"the self-test returns {difference.index} instead of -1")]
    lines = [("different", where)]
    if difference.index is not None:
        lines.append(("", f"output {difference.index}: expected {difference.expected}, found {difference.found}"))
    if difference.words:
        first = f"section {difference.words[0].section} differs first, after {counted(difference.after or 0, 'sample')}"
        words = ", ".join(f"{one.word} is {one.found} instead of {one.expected}" for one in difference.words)
        lines.append(("", f"{first}: {words}"))
    return lines


def _instructions(found: Instructions) -> list[str]:
    return [
        row("counted", f"step: {_spread(found.step)} instructions a call"),
        row("", f"run: {_spread(found.run)} instructions a sample, in blocks of {BLOCK}"),
        row("", f"over {found.samples} samples each, from entry to return"),
    ]


def _spread(spread: Spread) -> str:
    if spread.lowest == spread.highest:
        return number(spread.mean, 4)
    return f"{number(spread.lowest, 4)} to {number(spread.highest, 4)} (mean {number(spread.mean, 4)})"


def _bytes(sizes: Bytes) -> str:
    parts = [("code", sizes.code), ("constants", sizes.constants), ("state", sizes.state), ("stack", sizes.stack)]
    text = ", ".join(f"{name} {size}" for name, size in parts if size is not None)
    if sizes.helpers:
        routines = ", ".join(f"{name} {size}" for name, size in sizes.helpers.items())
        text += f"; apart from these, routines of the compiler: {routines}"
    return text
