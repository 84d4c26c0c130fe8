"""Colours, in three sets. Every pair that stands for text keeps a contrast of at least 4.5 to 1.

Colour is never the only signal: every state is a word or a mark as well.
"""

from __future__ import annotations

from dataclasses import dataclass

__all__ = ["BRIGHT", "DARK", "PALETTES", "RED", "Palette", "contrast"]


@dataclass(frozen=True)
class Palette:
    """Colours by what they mean, as ``#rrggbb``."""

    name: str
    dark: bool
    background: str
    text: str
    quiet: str
    signal: str
    envelope: str
    zero: str
    good: str
    bad: str
    warn: str
    calm_bar: str
    calm_text: str
    act_bar: str
    act_text: str
    stop_bar: str
    stop_text: str

    def pairs(self) -> dict[str, tuple[str, str]]:
        """Every (text, ground) that a screen may show, by name."""
        on_ground = ("text", "quiet", "signal", "envelope", "zero", "good", "bad", "warn")
        pairs = {name: (getattr(self, name), self.background) for name in on_ground}
        pairs |= {f"on {name}": (self.background, getattr(self, name)) for name in on_ground[5:]}
        pairs["calm"] = (self.calm_text, self.calm_bar)
        pairs["act"] = (self.act_text, self.act_bar)
        pairs["stop"] = (self.stop_text, self.stop_bar)
        return pairs


DARK = Palette(
    name="evenarm-dark",
    dark=True,
    background="#0b0f14",
    text="#e8eef4",
    quiet="#9fb0c0",
    signal="#7fd4ff",
    envelope="#c9b3ff",
    zero="#ffd166",
    good="#7ee0a1",
    bad="#ff8a80",
    warn="#ffc35c",
    calm_bar="#1d2a38",
    calm_text="#e8eef4",
    act_bar="#ffd166",
    act_text="#10151b",
    stop_bar="#b3261e",
    stop_text="#ffffff",
)

BRIGHT = Palette(
    name="evenarm-bright",
    dark=False,
    background="#ffffff",
    text="#101418",
    quiet="#4a5560",
    signal="#00508f",
    envelope="#6a2c91",
    zero="#8a3b00",
    good="#0b6b34",
    bad="#a8120a",
    warn="#7a4b00",
    calm_bar="#dde5ec",
    calm_text="#101418",
    act_bar="#0b3d66",
    act_text="#ffffff",
    stop_bar="#a8120a",
    stop_text="#ffffff",
)

# For a dark-adapted eye: no green and no blue anywhere, so rod vision is left alone.
RED = Palette(
    name="evenarm-red",
    dark=True,
    background="#000000",
    text="#ff0000",
    quiet="#f00000",
    signal="#ff0000",
    envelope="#f00000",
    zero="#ff0000",
    good="#ff0000",
    bad="#ff0000",
    warn="#ff0000",
    calm_bar="#260000",
    calm_text="#ff0000",
    act_bar="#ff0000",
    act_text="#000000",
    stop_bar="#ff0000",
    stop_text="#000000",
)

PALETTES = (DARK, BRIGHT, RED)


def _luminance(colour: str) -> float:
    channels = (int(colour[start : start + 2], 16) / 255 for start in (1, 3, 5))
    linear = (c / 12.92 if c <= 0.04045 else ((c + 0.055) / 1.055) ** 2.4 for c in channels)
    return sum(weight * c for weight, c in zip((0.2126, 0.7152, 0.0722), linear, strict=True))


def contrast(one: str, other: str) -> float:
    """Contrast ratio of two ``#rrggbb`` colours, 1 to 21 (WCAG 2.1, success criterion 1.4.3)."""
    low, high = sorted((_luminance(one), _luminance(other)))
    return (high + 0.05) / (low + 0.05)
