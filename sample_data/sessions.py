"""The name of a session in; how its sweeps were taken and written, and what its sheet does not know, out.

A session is a folder with a sheet. What stands here is what no sheet tells: the form of each file, a receiver that
compresses, a pad that is not what its label says, a device that was another when it was swept, and the cause of the
gain change that the sweeps of a device are meant to show.
"""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass, field
from pathlib import Path
from typing import Final, Literal, TypeAlias

from analyzer import Receiver

__all__ = ["SESSIONS", "Pairs", "Recording", "ReversePass", "Session"]

Pairs: TypeAlias = Literal["RI", "MA", "DB"]
ReversePass: TypeAlias = Literal["measured", "zeros", "copies"]
FOLDER: Final = Path(__file__).resolve().parent


@dataclass(frozen=True)
class Recording:
    """How a sweep was taken and written. Several legal forms occur, as in files from several programs."""

    span_mhz: tuple[float, float]
    option_line: str
    unit: str
    pairs: Pairs
    reverse_pass: ReversePass = "zeros"
    separator: str = " "
    newline: str = "\n"


@dataclass(frozen=True)
class Session:
    """A bench session, beside its sheet."""

    name: str
    points: int
    recordings: Mapping[str, Recording]
    """By file name of the sweep."""
    receiver: Receiver | None = None
    off_label_db: Mapping[str, float] = field(default_factory=dict)
    """By pad: how much more it loses than its label says, beside what it is allowed."""
    swept_as: Mapping[str, str] = field(default_factory=dict)
    """By file name: the circuit that the device was at that moment."""
    causes: Mapping[str, str] = field(default_factory=dict)
    """By device: why gain truly changed between its sweeps."""

    @property
    def home(self) -> Path:
        """The folder that holds the sheet of the session, and its sweeps."""
        return FOLDER / self.name


TELEMETRY: Final = Session(
    "telemetry",
    401,
    {
        "first_low.s2p": Recording((18.4, 24.4), "# HZ S RI R 50", "Hz", "RI"),
        "first_mid.s2p": Recording((18.4, 24.4), "# MHz S MA R 50", "MHz", "MA", separator="\t"),
        "first_high.s2p": Recording((18.4, 24.4), "# HZ S RI R 50", "Hz", "RI", newline="\r\n"),
        "limiter.s2p": Recording((15.4, 27.4), "# R 50 RI S KHZ", "kHz", "RI"),
        "driver_low.s2p": Recording((13.4, 29.4), "#", "GHz", "MA"),
        "driver_high.s2p": Recording((13.4, 29.4), "# ghz s ri", "GHz", "RI"),
        "filter.s2p": Recording((18.9, 23.9), "# MHz S DB R 50", "MHz", "DB", "measured"),
        "discriminator.s2p": Recording((19.4, 23.4), "#MHz S MA R 50.0", "MHz", "MA", "copies"),
    },
)


def _megahertz(start: float, stop: float) -> Recording:
    """Return the one form in which the sweeps of the second session were written."""
    return Recording((start, stop), "# MHz S MA R 50", "MHz", "MA")


CAUSES: Final = Session(
    "causes",
    201,
    {
        **{f"buffer_{drive}.s2p": _megahertz(13.4, 29.4) for drive in ("low", "mid", "high")},
        **{f"second_{drive}.s2p": _megahertz(18.4, 24.4) for drive in ("low", "mid", "high")},
        **{f"pre_{drive}.s2p": _megahertz(15.4, 27.4) for drive in ("low", "mid", "high", "full")},
        **{f"mixer_{drive}.s2p": _megahertz(15.4, 27.4) for drive in ("low", "high")},
        **{f"oscillator_{drive}.s2p": _megahertz(13.4, 29.4) for drive in ("lowest", "low", "mid", "high")},
        **{f"third_{drive}.s2p": _megahertz(13.4, 29.4) for drive in ("low", "mid", "high", "padded")},
        **{f"narrow_{drive}.s2p": _megahertz(18.4, 24.4) for drive in ("low", "mid", "high")},
        **{f"converter_{drive}.s2p": _megahertz(15.4, 27.4) for drive in ("first", "mid", "again")},
    },
    receiver=Receiver(p1db_dbm=-2.2, smoothness=2.0),
    off_label_db={"f20": 1.6},
    swept_as={"converter_first.s2p": "converter stage, cold"},
    causes={
        "buffer amplifier": "clean",
        "second IF stage": "output-limited",
        "preamplifier": "input-limited",
        "mixer amplifier": "input-limited",
        "oscillator buffer": "pad-value-suspect",
        "third IF stage": "receiver-overload",
        "narrow stage": "noise-limited",
        "converter stage": "reference-not-repeating",
    },
)

SESSIONS: Final = {session.name: session for session in (TELEMETRY, CAUSES)}
