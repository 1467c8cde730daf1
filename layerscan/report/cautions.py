"""The cautions that README, pages and release records carry, in one place."""

from __future__ import annotations

CAUTIONS: tuple[str, ...] = (
    "This is not an accredited measurement: no ISO/IEC 17025 result, and no electronic-signature system stands behind "
    "it. The laboratory validates the method for its own use.",
    "Nothing that protects people (eye protection, glazing, medical or dental parts, barrier packaging, insulation, "
    "battery films) is released on predicted or imaged values: measure the property itself.",
    "Agreement of a predicted with an observed colour does not prove a mechanism.",
    "Local codes and licensed practice decide.",
)

RELEASE_CAUTION = " ".join((CAUTIONS[0], CAUTIONS[1], CAUTIONS[3]))
"""What stands beside every decision on a lot."""
