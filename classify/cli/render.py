"""Results as text for a terminal. Layout only: every number arrives computed."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from classify.workflow import StageName, StageResult


def table(header: Sequence[str], rows: Sequence[Sequence[str]]) -> str:
    """Columns lined up: the first to the left, the others to the right."""
    widths = [max(len(row[i]) for row in (header, *rows)) for i in range(len(header))]
    lines = []
    for row in (header, *rows):
        cells = [row[0].ljust(widths[0]), *(cell.rjust(width) for cell, width in zip(row[1:], widths[1:], strict=True))]
        lines.append("  ".join(cells).rstrip())
    return "\n".join(lines)


def stage_text(name: StageName, result: StageResult | None) -> str:
    """One stage's result in a few lines."""
    if result is None:
        return f"{name}: up to date"
    return f"{name}: done\n" + "\n".join(f"  {line}" for line in _LINES[name](result.summary).splitlines())


def percent(value: float | None) -> str:
    """0.8312 as "83.1 %"; nothing known as "-"."""
    return "-" if value is None else f"{100 * value:.1f} %"


def _review(summary: Mapping[str, Any]) -> str:
    lines = []
    if summary["suspects"]:
        lines.append("training polygons to look at, most suspect first:")
        lines += [_suspect(suspect) for suspect in summary["suspects"]]
    else:
        lines.append("no suspect training polygon")
    weak = [pair for pair in summary["separability"]["pairs"] if pair["verdict"] == "weak"]
    if weak:
        lines.append(f"{len(weak)} pairs of classes are hard to tell apart; see outputs/training/review.json")
    return "\n".join(lines)


def _suspect(suspect: Mapping[str, Any]) -> str:
    return "{rank}. polygon {polygon} ({class_name}): {sentence}".format_map(suspect)


def _train(summary: Mapping[str, Any]) -> str:
    lines = [f"{summary['polygons']} polygons, {summary['pixels']:,} pixels, {len(summary['features'])} features"]
    accuracy = summary["screening"]["screening_accuracy"]
    if accuracy is None:
        lines.append("screening accuracy: not known, as no polygons could be held out")
    else:
        lines.append(f"screening accuracy on held-out polygons: {percent(accuracy)} (this is not map accuracy)")
    return "\n".join(lines)


def _classify(summary: Mapping[str, Any]) -> str:
    rows = [[row["name"], f"{row['pixels']:,}", f"{row['area']:,.1f} {row['unit']}"] for row in summary["areas"]]
    return table(["mapped", "pixels", "ground area"], rows)


def assessment_text(summary: Mapping[str, Any]) -> str:
    """An assessment (as in assessment.json) in one table, in words that its evidence allows."""
    from classify.assessment.evidence import EVIDENCE

    overall = summary["overall_accuracy"]
    level, unit = f"{100 * summary['confidence_level']:g} %", summary["area_unit"]
    rows = []
    for name in summary["classes"]:
        area = summary["area"][name]
        users, producers = (summary[key][name]["estimate"] for key in ("users_accuracy", "producers_accuracy"))
        rows.append([name, percent(users), percent(producers), _with_margin(area)])
    evidence = EVIDENCE[summary["evidence"]]
    if evidence.has_intervals:
        lines = [f"overall accuracy {percent(overall['estimate'])} ({level} interval {_interval(overall)})"]
    else:
        lines = [f"{evidence.accuracy_term}: {percent(overall['estimate'])} overall. {evidence.claim}"]
    if evidence.has_intervals and summary["design"]["reservations"]:
        lines.append(summary["claim"])
    lines.append(table(["class", "user's", "producer's", f"area, {unit}" if unit else "area"], rows))
    return "\n".join(lines)


def _interval(estimate: Mapping[str, Any]) -> str:
    if estimate.get("lower") is None:
        return "not known"
    return f"{percent(estimate['lower'])} to {percent(estimate['upper'])}"


def _with_margin(area: Mapping[str, Any]) -> str:
    if area.get("estimate") is None:
        return "-"
    if area.get("lower") is None:
        return f"{area['estimate']:,.1f}"
    return f"{area['estimate']:,.1f} ({area['lower']:,.1f} to {area['upper']:,.1f})"


def _report(summary: Mapping[str, Any]) -> str:
    return "\n".join(summary["files"])


_LINES = {"review": _review, "train": _train, "classify": _classify, "assess": assessment_text, "report": _report}
