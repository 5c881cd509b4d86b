"""The protocol file: YAML to a frozen value, every error with its line and column, all at once."""

from __future__ import annotations

from decimal import Decimal
from typing import Annotated, Any, Literal

from coilwright.geometry.documents import AlsoAccepts, Document, Model, NumberOrPair, Vector3, Version, validate
from coilwright.geometry.errors import InputError
from coilwright.geometry.frames import Axes, Unit
from coilwright.geometry.names import Name
from coilwright.geometry.pose_list import Origin
from coilwright.geometry.targets import TargetSpec
from pydantic import BeforeValidator, Discriminator, Field, Tag, field_validator, model_validator

from .lab import Pattern

Positive = Annotated[float, Field(gt=0)]
NotNegative = Annotated[float, Field(ge=0)]
Count = Annotated[int, Field(ge=1, le=1_000_000)]
Seed = Annotated[int, Field(ge=0, lt=2**63)]
Percent = Annotated[float, Field(gt=0, le=1000)]


class SphereSpec(Model):
    """The conducting sphere, if it is given and not fitted."""

    centre_mm: Vector3
    radius_mm: Annotated[float, Field(ge=40, le=200)]


def _decimals(value: float, most: int, what: str) -> float:
    """Refuse more decimals than are kept, instead of rounding."""
    if Decimal(str(value)).normalize().as_tuple().exponent < -most:  # type: ignore[operator]  # finite, so an integer
        raise ValueError(f"at most {most} decimals ({what}), got {value!r}")
    return value


def _one_or_many(value: Any) -> Any:
    return (value,) if isinstance(value, str) else tuple(value) if isinstance(value, list) else value


class HeadSpec(Model):
    """The head: its scalp, and what else is known of it."""

    scalp: str | None = None
    phantom: bool = False
    unit: Unit = "mm"
    axes: Axes = "RAS"
    origin: Origin | None = None
    cortex: Annotated[
        tuple[str, ...],
        BeforeValidator(_one_or_many),
        AlsoAccepts(),
    ] = ()
    sphere: SphereSpec | None = None
    landmarks: str | None = None

    @model_validator(mode="after")
    def _one_scalp(self) -> HeadSpec:
        if (self.scalp is not None) == self.phantom:
            raise ValueError("expected exactly one of scalp (a surface) or phantom: true")
        if self.scalp is not None and self.origin is None:
            raise ValueError(
                "origin: missing; say which origin the scalp's frame has: scanner, surface, template, landmarks"
            )
        return self


def _angles(value: Any) -> Any:
    if not isinstance(value, list) or len(value) != 2 or any(isinstance(v, str | bool) for v in value):
        raise ValueError("expected [from, to] in degrees")
    if not value[0] <= value[1]:
        raise ValueError(f"from {value[0]:g} is above to {value[1]:g}; give [from, to]")
    return tuple(value)


class RegionSpec(Model):
    """Random poses over a patch of scalp."""

    centre_mm: Vector3
    radius_mm: Annotated[float, Field(gt=0, le=120)]
    poses: Annotated[int, Field(ge=1, le=100_000)]
    midline_deg: Annotated[tuple[float, float], BeforeValidator(_angles)] = (-180.0, 180.0)
    seed: Seed


class PlacementSpec(Model):
    """How a target becomes a pose."""

    aim: Literal["nearest_scalp", "over_target"] = "nearest_scalp"
    normal_radius_mm: Annotated[float, Field(ge=1, le=60)] = 15.0


class KeepOutSpec(Model):
    """A ball that the casing keeps out of."""

    name: Name
    centre_mm: Vector3
    radius_mm: Positive


class ReachSpec(Model):
    """What the casing keeps away from, and how far it may be lifted and tilted."""

    margin_mm: Annotated[float, Field(ge=0, le=50)] = 1.0
    lift_most_mm: Annotated[float, Field(ge=0, le=50)] = 5.0
    tilt_limit_deg: Annotated[float, Field(gt=0, le=90)] = 30.0
    azimuth_step_deg: Annotated[float, Field(gt=0, le=90)] = 15.0
    retract_mm: Annotated[float, Field(ge=0, le=500)] = 80.0
    keep_out: tuple[KeepOutSpec, ...] = ()

    @field_validator("keep_out")
    @classmethod
    def _names_differ(cls, keep_out: tuple[KeepOutSpec, ...]) -> tuple[KeepOutSpec, ...]:
        names = [item.name for item in keep_out]
        if "scalp" in names or "limit" in names:
            raise ValueError("a keep-out cannot be called scalp or limit; these words say something else in tables")
        twice = sorted({name for name in names if names.count(name) > 1})
        if twice:
            raise ValueError(f"{twice[0]!r} is there twice; give each keep-out its own name")
        return keep_out

    @field_validator("azimuth_step_deg")
    @classmethod
    def _divides(cls, step: float) -> float:
        if Decimal(360) % Decimal(str(step)) != 0:
            raise ValueError(f"360 degrees are no whole number of steps of {step:g}")
        return step


class ThresholdSpec(Model):
    """A motor threshold, as output of the stimulator."""

    output_percent: Annotated[float, Field(ge=1, le=100)]
    kind: Literal["resting", "active"]
    method: Literal["emg", "visible_twitch"]

    @field_validator("output_percent")
    @classmethod
    def _three_decimals(cls, percent: float) -> float:
        return _decimals(percent, 3, "thousandths of a percent")


def _one_or_two(value: Any) -> Any:
    return (value,) if isinstance(value, dict) else tuple(value) if isinstance(value, list) else value


class TrainSpec(Model):
    """A train instead of each single pulse."""

    rate_hz: Annotated[float, Field(gt=0, le=1000)]
    pulses: Count
    pause_s: Positive


class ExponentialSpec(Model):
    """Intervals of a floor plus an exponential wait.

    Without `longest_s` the hazard beyond the floor is flat: having waited tells nothing about when the next pulse
    comes. With it the distribution is cut off there, and the hazard rises towards the end.
    """

    floor_s: Annotated[float, Field(gt=0, le=2000)]
    mean_s: Annotated[float, Field(gt=0, le=2000)]
    longest_s: Annotated[float, Field(gt=0, le=2000)] | None = None

    @model_validator(mode="after")
    def _rising(self) -> ExponentialSpec:
        if not self.mean_s > self.floor_s:
            raise ValueError(f"mean_s {self.mean_s:g} must be above floor_s {self.floor_s:g}: it includes the floor")
        if self.longest_s is not None and not self.longest_s > self.floor_s:
            raise ValueError(f"longest_s {self.longest_s:g} must be above floor_s {self.floor_s:g}")
        return self


class RestSpec(Model):
    """A pause after every so many pulses; a train or pattern is never broken."""

    after_pulses: Count
    minutes: Annotated[float, Field(gt=0, le=240)]


class PulsesSpec(Model):
    """What is fired at each pose."""

    threshold_percent: Annotated[tuple[Percent, ...], Field(min_length=1)] | None = None
    output_percent: Annotated[tuple[Percent, ...], Field(min_length=1)] | None = None
    percent_of: Literal["resting", "active"] | None = None
    per_pose: Count = 1
    interval_s: NumberOrPair | None = None
    interval_exponential: ExponentialSpec | None = None
    train: TrainSpec | None = None
    pattern: Pattern | None = None
    rest: RestSpec | None = None

    @field_validator("interval_s")
    @classmethod
    def _rising(cls, interval: tuple[float, float] | None) -> tuple[float, float] | None:
        if interval is None:
            return None
        low, high = interval
        if not high >= low:
            raise ValueError(f"the longest {high:g} is below the shortest {low:g}; give [shortest, longest]")
        if not (low > 0 and high <= 2000):
            raise ValueError(f"expected more than 0 and at most 2000 seconds, got {low:g} to {high:g}")
        for value in interval:
            _decimals(value, 6, "microseconds")
        return interval

    @field_validator("threshold_percent", "output_percent")
    @classmethod
    def _levels_differ(cls, levels: tuple[float, ...] | None) -> tuple[float, ...] | None:
        if levels and len(set(levels)) < len(levels):
            raise ValueError("an intensity is there twice; raise per_pose instead")
        return levels

    @field_validator("train")
    @classmethod
    def _whole_microseconds(cls, train: TrainSpec | None) -> TrainSpec | None:
        if train is not None:
            _decimals(train.pause_s, 6, "microseconds")
        return train

    @model_validator(mode="after")
    def _one_of_each(self) -> PulsesSpec:
        if (self.threshold_percent is None) == (self.output_percent is None):
            raise ValueError("expected exactly one of threshold_percent, output_percent")
        timings = (self.interval_s, self.interval_exponential, self.train, self.pattern)
        if sum(part is not None for part in timings) != 1:
            raise ValueError("expected exactly one of interval_s, interval_exponential, train, pattern")
        return self


class OrderSpec(Model):
    """In which order the poses are visited."""

    kind: Literal["shuffled", "blocks", "balanced", "as_listed"] = "shuffled"
    seed: Seed = 0
    apart_mm: NotNegative = 0.0
    longest_run: Count | None = None
    sham_share: Annotated[float, Field(ge=0, lt=1)] = 0.0


class GateSpec(Model):
    """How close the tracked coil must be to the pose before a pulse is fired."""

    position_mm: Positive
    angle_deg: Annotated[float, Field(gt=0, le=90)]
    settle_ms: Annotated[float, Field(ge=0, le=60_000)]


class Protocol(Model):
    """A protocol file; every key is described in docs/protocol.md."""

    coilwright: Version
    title: Annotated[str, Field(min_length=1, max_length=200)] = "untitled"
    person: Annotated[str, Field(pattern=r"^[A-Za-z0-9][A-Za-z0-9_-]{0,31}$")]
    head: HeadSpec
    coil: Annotated[str, Field(min_length=1)]
    standoff_mm: Annotated[float, Field(ge=0, le=60)]
    targets: Annotated[
        # The tags in angle brackets never reach a message.
        Annotated[str, Tag("<file>")] | Annotated[tuple[TargetSpec, ...], Tag("<list>")],
        Discriminator(lambda value: "<file>" if isinstance(value, str) else "<list>"),
    ] = ()
    region: RegionSpec | None = None
    placement: PlacementSpec = PlacementSpec()
    reach: ReachSpec = ReachSpec()
    threshold: Annotated[
        tuple[ThresholdSpec, ...],
        BeforeValidator(_one_or_two),
        AlsoAccepts(),
    ] = ()
    pulses: PulsesSpec | None = None
    order: OrderSpec = OrderSpec()
    gate: (
        Annotated[
            Annotated[Literal["none"], Tag("<word>")] | Annotated[GateSpec, Tag("<keys>")],
            Discriminator(lambda value: "<word>" if isinstance(value, str) else "<keys>"),
        ]
        | None
    ) = None
    limits: str | None = None

    @field_validator("threshold")
    @classmethod
    def _one_of_a_kind(cls, thresholds: tuple[ThresholdSpec, ...]) -> tuple[ThresholdSpec, ...]:
        kinds = [item.kind for item in thresholds]
        if len(set(kinds)) < len(kinds):
            raise ValueError("two thresholds of one kind; give one, or one resting and one active")
        by_kind = {item.kind: item.output_percent for item in thresholds}
        if len(by_kind) == 2 and not by_kind["active"] <= by_kind["resting"]:
            raise ValueError(
                f"the active threshold {by_kind['active']:g} is above the resting one {by_kind['resting']:g}; a muscle"
                " that is tense answers to less, so one of them is wrong"
            )
        return thresholds

    @model_validator(mode="after")
    def _fits_together(self) -> Protocol:
        if not self.targets and self.region is None:
            raise ValueError("targets, region: both missing; give targets, a region, or both")
        if self.pulses is None:
            return self
        if self.pulses.threshold_percent is not None and not self.threshold:
            raise ValueError("threshold: missing; pulses.threshold_percent is a share of it")
        if self.reference_kind is None and (self.pulses.percent_of or self.pulses.threshold_percent):
            raise ValueError(f"pulses.percent_of: there is no {self.pulses.percent_of} threshold")
        return self

    @property
    def fired(self) -> PulsesSpec:
        """What is fired at each pose; a protocol that only places has none.

        Raises
        ------
        InputError
        """
        if self.pulses is None:
            raise InputError("pulses: missing; a schedule needs to know what is fired (placing does not)")
        return self.pulses

    @property
    def reference_kind(self) -> str | None:
        """The kind of threshold that ``pulses.threshold_percent`` is a share of.

        The one that is named; else the only one; else the active one for theta burst, the resting one otherwise.
        """
        kinds = [item.kind for item in self.threshold]
        pulses = self.pulses
        named = pulses.percent_of if pulses else None
        if named is None and len(kinds) == 2:
            named = "active" if pulses and pulses.pattern else "resting"
        if named is None:
            return kinds[0] if kinds else None
        return named if named in kinds else None

    def threshold_of(self, kind: str | None) -> ThresholdSpec | None:
        """Return the threshold of a kind, or None."""
        return next((item for item in self.threshold if item.kind == kind), None)


def parse_protocol(document: Document) -> Protocol:
    """Hold a document against the model of a protocol.

    Raises
    ------
    InputError
        ``file:line:column: key: what was expected, what came, the remedy``, one line each.

    Examples
    --------
    >>> from coilwright.geometry.documents import read_yaml
    >>> parse_protocol(read_yaml(b"coilwright: 1", "p.yaml"))
    Traceback (most recent call last):
    ...
    coilwright.geometry.errors.InputError: p.yaml:1:1: person: missing; this key is required
    p.yaml:1:1: head: missing; this key is required
    p.yaml:1:1: coil: missing; this key is required
    p.yaml:1:1: standoff_mm: missing; this key is required
    """
    problems: list[str] = []
    try:
        protocol = validate(document, Protocol)
    except InputError as error:
        problems += error.lines
    problems += _names_twice(document)
    if problems:
        raise InputError(*problems)
    return protocol


def _names_twice(document: Document) -> list[str]:
    """Targets whose name stands there twice, each with its own place; said together with everything else."""
    listed = document.value.get("targets")
    if not isinstance(listed, list):
        return []
    seen: set[str] = set()
    problems = []
    for i, item in enumerate(listed):
        name = item.get("name") if isinstance(item, dict) else None
        if isinstance(name, str) and name in seen:
            problems.append(f"{document.at(('targets', i, 'name'))}: {name!r} is the name of two targets; rename one")
        if isinstance(name, str):
            seen.add(name)
    return problems
