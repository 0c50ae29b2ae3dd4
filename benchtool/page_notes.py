"""Findings, cautions and the origin of the data in; the foot of the page out."""

from __future__ import annotations

from collections.abc import Sequence
from typing import Final

from benchtool.digits import stated
from benchtool.model import BenchResult, DeviceResult, Finding, Severity
from benchtool.page_paper import BLUE, HEADING_PT, INK, LIGHT, ORANGE, VERMILLION, WIDTH_PT, Block, Paper
from benchtool.page_text import Lines, fit
from benchtool.page_traces import Trace

__all__ = ["CAUTIONS", "cautions", "findings_block", "provenance"]

CAUTIONS: Final = (
    "Check pad power ratings and port limits before power is applied. Pad the output of an amplifier before the "
    "analyzer. DC-block biased ports. An amplifier under test may oscillate. Radiating a signal may need a licence: "
    "local codes and licensed practice stand above anything printed here."
)

_RANK: Final[dict[Severity, int]] = {"fault": 0, "caution": 1, "note": 2}
_MARK: Final[dict[Severity, tuple[str, float, str]]] = {
    "fault": ("s", 5.0, VERMILLION),
    "caution": ("^", 5.6, ORANGE),
    "note": ("o", 4.0, BLUE),
}
_TEXT_PT: Final = 132.0
_MOST_HASHES: Final = 12
_LONG_NAMES: Final = 240
"""Letters in all file names together above which the origin of the data gives their numbers instead."""


def _setting(finding: Finding) -> tuple[Lines, Lines]:
    message = finding.message
    if finding.sweep and finding.sweep not in message:
        message = f"{finding.sweep}: {message}"
    said = fit(f"{message} → {finding.advice}" if finding.advice else message, (7.0,), WIDTH_PT - _TEXT_PT, most=9)
    return fit(finding.code, (7.0, 6.5, 6.0), _TEXT_PT - 52.0, bold=True, most=1), said


def findings_block(findings: Sequence[Finding], room: float) -> Block:
    """Return the findings, the gravest first, as many as `room` points hold; the rest are counted."""
    if not findings:
        return Block(HEADING_PT, lambda paper, top: paper.heading(top, "Findings: none"))
    ordered = sorted(findings, key=lambda f: _RANK[f.severity])
    entries: list[tuple[Finding, Lines, Lines, float]] = []
    used = HEADING_PT + 1.0
    for index, finding in enumerate(ordered):
        code, said = _setting(finding)
        tall = max(said.height_pt(1.18), code.height_pt(1.18)) + 2.6
        last = index + 1 == len(ordered)
        if used + tall + (0.0 if last else 8.5) > room:
            break
        entries.append((finding, code, said, tall))
        used += tall
    left_over = len(ordered) - len(entries)

    def draw(paper: Paper, top: float) -> None:
        counts = ", ".join(
            f"{count} {word}{'s' if count > 1 else ''}"
            for word in _RANK
            if (count := sum(f.severity == word for f in findings))
        )
        paper.heading(top, "Findings", aside=counts)
        y = top + HEADING_PT + 1.0
        for finding, code, said, tall in entries:
            shape, size, color = _MARK[finding.severity]
            paper.marker(4.0, y + 5.0, shape, size, color)
            paper.text(11.0, y + 7.2, finding.severity, 6.5, color=LIGHT)
            paper.lines(48.0, y + 0.4, code, bold=True, leading=1.18)
            paper.lines(_TEXT_PT, y + 0.4, said, color=INK, leading=1.18)
            y += tall
        if left_over:
            more = f"{left_over} more in results.json" if entries else f"{left_over} findings in results.json"
            paper.text(_TEXT_PT, y + 6.5, more, 6.5, bold=True)

    return Block(used + (8.5 if left_over else 0.0), draw)


def cautions() -> Block:
    """Return the cautions."""
    said = fit(f"Cautions. {CAUTIONS}", (6.2,), WIDTH_PT, most=9)

    def draw(paper: Paper, top: float) -> None:
        paper.stroke([0, WIDTH_PT], [top, top], LIGHT, 0.4)
        paper.lines(0, top + 2.0, said, color=INK, leading=1.18)

    return Block(said.height_pt(1.18) + 3.0, draw)


def _spans(looks: Sequence[Trace]) -> list[str]:
    """Return points and span of each sweep."""
    texts = []
    for look in looks:
        frequency = look.sweep.raw.frequency_hz
        span = f"{stated(float(frequency[0]), 'Hz')} to {stated(float(frequency[-1]), 'Hz')}"
        texts.append(f"{len(frequency)} points, {span}")
    return texts


def provenance(bench: BenchResult, device: DeviceResult, looks: Sequence[Trace]) -> Block:
    """Return where every number came from: assumptions, files with the start of their SHA-256, span, version, time."""
    spans = _spans(looks)
    same = len(set(spans)) == 1 and len(spans) > 1
    digests = [sweep.sweep.raw.sha256[:12] or "no hash" for sweep in looks[:_MOST_HASHES]]
    names = [look.sweep.file for look in looks]
    if sum(map(len, names)) > _LONG_NAMES:
        # The list of sweeps above has the names in full.
        names = [str(look.number) for look in looks]
    files = [
        f"{name} ({digest}{'' if same else f'; {span}'})"
        for name, digest, span in zip(names, digests, spans, strict=False)
    ]
    if len(looks) > len(files):
        files.append(f"{len(looks) - len(files)} more in results.json")
    parts = []
    if device.trials:
        parts.append(f"Intervals from {device.trials} trials.")
    if device.assumptions:
        parts.append(f"Assumed, as the sheet does not say: {', '.join(device.assumptions)}.")
    parts.append(f"Sweeps, SHA-256: {', '.join(files)}{f'; each {spans[0]}' if same else ''}.")
    if bench.sheet is not None or bench.sheet_sha256:
        name = bench.sheet.name if bench.sheet is not None else "bench sheet"
        parts.append(f"Sheet: {name} ({bench.sheet_sha256[:12] or 'no hash'}).")
    else:
        parts.append("No bench sheet.")
    parts.append(f"Made {bench.made_at} by benchtool {bench.version}.")
    said = fit(" ".join(parts), (6.0,), WIDTH_PT, most=99)

    def draw(paper: Paper, top: float) -> None:
        paper.lines(0, top, said, color=LIGHT, leading=1.2)

    return Block(said.height_pt(1.2), draw)
