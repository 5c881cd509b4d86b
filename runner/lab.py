"""The lab's own file: its limits, its checklist, its approvals. A value that is missing makes its rule incomplete."""

from __future__ import annotations

import datetime as dt
from typing import Annotated, Any, Final, Literal

from coilwright.geometry.documents import Document, Model, Version, validate
from coilwright.geometry.errors import did_you_mean
from pydantic import BeforeValidator, Field, WithJsonSchema, field_validator, model_validator

# Rules that an approval can widen. The lab's own numbers are widened in the lab's own file.
APPROVABLE: Final = (
    "interval",
    "train_duration",
    "train_pulses",
    "train_pause",
    "train_count",
    "train_rate",
    "train_intensity",
    "theta_burst",
    "contact_temperature",
)
# Rules whose approval must say for which rate and intensity it was given.
SCOPED: Final = ("train_duration", "train_pulses", "train_pause", "train_count", "train_rate", "train_intensity")
Pattern = Literal["intermittent_theta_burst", "continuous_theta_burst"]
Positive = Annotated[float, Field(gt=0)]
PositiveCount = Annotated[int, Field(gt=0)]


def _rules(value: Any) -> Any:
    rules = [value] if isinstance(value, str) else value
    if not isinstance(rules, list) or not rules or not all(isinstance(rule, str) for rule in rules):
        raise ValueError("expected a rule or a list of rules")
    for rule in rules:
        if rule not in APPROVABLE:
            raise ValueError(f"unknown rule {rule!r}{did_you_mean(rule, APPROVABLE)} (one of {', '.join(APPROVABLE)})")
    return tuple(rules)


class Approval(Model):
    """What a committee allowed: which rules, for which rate, intensity and pattern, up to what value, until when.

    For rules with a shortest value (``interval``, ``train_pause``) `up_to` is the shortest that is allowed.
    """

    rule: Annotated[
        tuple[str, ...],
        BeforeValidator(_rules),
        WithJsonSchema(
            {
                "anyOf": [
                    {"enum": list(APPROVABLE)},
                    {"type": "array", "items": {"enum": list(APPROVABLE)}, "minItems": 1},
                ]
            }
        ),
    ]
    rate_hz: Positive | None = None
    threshold_percent: Positive | None = None
    pattern: Pattern | None = None
    up_to: Positive
    reference: Annotated[str, Field(min_length=1)]
    approved_by: Annotated[str, Field(min_length=1)]
    until: dt.date

    @model_validator(mode="after")
    def _has_scope(self) -> Approval:
        if any(rule in SCOPED for rule in self.rule) and None in (self.rate_hz, self.threshold_percent):
            raise ValueError("an approval for trains says its scope: rate_hz and threshold_percent are missing")
        if "theta_burst" in self.rule and None in (self.pattern, self.threshold_percent):
            raise ValueError("an approval for theta burst says its scope: pattern and threshold_percent are missing")
        return self

    def __str__(self) -> str:
        return f"{self.reference} ({self.approved_by}, until {self.until.isoformat()})"


class PulseLimits(Model):
    """Most pulses in a session, in any 24 hours, in any 7 days."""

    session: PositiveCount | None = None
    day: PositiveCount | None = None
    week: PositiveCount | None = None


class TemperatureLimits(Model):
    """Temperatures of the contact face: where to be careful, where to refuse."""

    caution: Annotated[float, Field(gt=0, le=60)]
    stop: Annotated[float, Field(gt=0, le=60)]

    @field_validator("stop")
    @classmethod
    def _above_caution(cls, stop: float, info: Any) -> float:
        caution = info.data.get("caution")
        if caution is not None and not stop >= caution:
            raise ValueError(f"the stop {stop:g} is below the caution {caution:g}")
        return stop


class LabFile(Model):
    """A lab file."""

    coilwright_lab: Version
    lab: Annotated[str, Field(min_length=1)]
    highest_output_percent: Annotated[float, Field(gt=0, le=100)] | None = None
    shortest_interval_s: Positive | None = None
    longest_session_min: Positive | None = None
    pulses: PulseLimits = PulseLimits()
    contact_temperature_c: TemperatureLimits | None = None
    ledger: Annotated[str, Field(min_length=1)] | None = None
    sham: Literal["none", "tilted_coil", "sham_coil"] | None = None
    checklist: tuple[Annotated[str, Field(min_length=1)], ...] = ()
    approvals: tuple[Approval, ...] = ()


def parse_lab(document: Document) -> LabFile:
    """Hold a document against the model of a lab file; see `documents.validate`."""
    return validate(document, LabFile)
