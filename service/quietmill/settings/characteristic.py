"""A characteristic as the settings describe it: where its readings come from, how they are judged, what is said."""

import hashlib
import json
from functools import cached_property
from typing import Annotated, Any, Literal, Self

from pydantic import BaseModel, BeforeValidator, ConfigDict, Field, model_validator

from quietmill.model import Cusum, Detector, Ewma
from quietmill.settings.problems import nearest, shown
from quietmill.settings.values import Duration, Identifier, NotYet, Number, Pointer, Rules, Text, Topic

__all__ = ["Baseline", "Characteristic", "Form", "Payload", "Specification", "with_default_detector"]

KINDS = ("individuals", "mean_range", "mean_s", "p", "np", "c", "u", "time_between", "count_between")
MAX_LABELS = 16
MAX_LABEL = 64
DETECTOR_KEYS = ("rules", "ewma", "cusum")
TOO_FINE = 2.0**-50
"""Beside a centre of 1, numbers this near can hardly be told apart."""


def with_default_detector(keys: dict[str, Any]) -> dict[str, Any]:
    """Return a characteristic's keys; one that names no detector gets that which is made for streams."""
    if any(keys.get(key) is not None for key in DETECTOR_KEYS):
        return keys
    return {**keys, "rules": [{"beyond_limits": 4}], "cusum": {"k": 0.5, "h": 8, "ceiling": 2}}


class Form(BaseModel):
    """What every part of the settings has in common: exact types, no unknown keys, no change after reading."""

    model_config = ConfigDict(extra="forbid", frozen=True, strict=True, allow_inf_nan=False)


def supported(*values: str, later: tuple[str, ...]) -> BeforeValidator:
    """Accept one of `values`; refuse what a later version brings as not supported yet, the rest with the nearest."""

    def choose(value: Any) -> str:
        if not isinstance(value, str):
            raise ValueError(f"must be {' or '.join(values)}, is {shown(value)}")
        if value in later:
            raise ValueError(f"{value} is not supported yet; supported is {', '.join(values)}")
        if value not in values:
            raise ValueError(f"{shown(value)} is unknown{nearest(value, values)}")
        return value

    return BeforeValidator(choose)


class Payload(Form):
    """Where in a message the reading stands, and how it becomes a value in the characteristic's unit."""

    value: Pointer | None = None
    time: Pointer | None = None
    sequence: Pointer | None = None
    array: Pointer | None = None
    time_unit: Annotated[Literal["s", "ms", "us", "ns"], supported("s", "ms", "us", "ns", later=())] | None = None
    sequence_size: Annotated[int, Field(ge=2, le=2**63 - 1)] | None = None
    strings: Annotated[Literal["parse"], supported("parse", later=())] | None = None
    scale: float = 1.0
    offset: float = 0.0
    size: NotYet = None
    subgroup: NotYet = None

    @property
    def parse_strings(self) -> bool:
        """Whether a number in quotes is a number."""
        return self.strings == "parse"

    @model_validator(mode="after")
    def consistent(self) -> Self:
        """Refuse pointers without a value, and what has no effect."""
        if self.scale == 0:
            raise ValueError("scale must not be 0: every reading would be the same")
        pointers = [self.time, self.sequence, self.array, self.strings]
        if self.value is None and any(pointer is not None for pointer in pointers):
            raise ValueError("needs value, the JSON Pointer to the reading, such as value: /force")
        if self.time_unit is not None and self.time is None:
            raise ValueError("time_unit needs time, the JSON Pointer to the time")
        if self.sequence_size is not None and self.sequence is None:
            raise ValueError("sequence_size needs sequence, the JSON Pointer to the counter")
        return self


class Baseline(Form):
    """Centre and short-term sigma of single readings, given as such or as their 3-sigma limits."""

    centre: Number
    sigma: Annotated[Number, Field(gt=0)]

    @model_validator(mode="before")
    @classmethod
    def resolved(cls, value: Any) -> Any:
        """Turn lower and upper into centre and sigma; refuse what a later version brings."""
        if isinstance(value, cls):
            return value
        if not isinstance(value, dict):
            raise ValueError(f"must be {{centre, sigma}} or {{lower, upper}}, is {shown(value)}")
        for key in ("file", "learn", "sigma_z", "ar1"):
            if key in value:
                raise ValueError(f"{key} is not supported yet; write {{centre, sigma}} or {{lower, upper}}")
        if not {"lower", "upper"} & set(value):
            return value
        if set(value) != {"lower", "upper"}:
            raise ValueError(f"takes centre and sigma, or lower and upper; has {', '.join(map(shown, value))}")
        lower, upper = value["lower"], value["upper"]
        if any(isinstance(side, bool) or not isinstance(side, (int, float)) for side in (lower, upper)):
            raise ValueError(f"lower and upper must be numbers, are {shown(lower)} and {shown(upper)}")
        if not all(-1e150 <= side <= 1e150 for side in (lower, upper)):
            raise ValueError(f"lower and upper must be finite numbers, are {shown(lower)} and {shown(upper)}")
        if not lower < upper:
            raise ValueError(f"lower must be below upper, are {shown(lower)} and {shown(upper)}")
        return {"centre": (float(lower) + upper) / 2, "sigma": (float(upper) - lower) / 6}

    @model_validator(mode="after")
    def consistent(self) -> Self:
        """Refuse a sigma that rounding alone would exceed."""
        if self.sigma <= abs(self.centre) * TOO_FINE:
            raise ValueError(f"sigma {self.sigma:g} is too small to be told apart beside a centre of {self.centre:g}")
        return self

    @cached_property
    def version(self) -> str:
        """The first 8 hex digits of the SHA-256 of the resolved baseline."""
        resolved = json.dumps({"centre": self.centre, "sigma": self.sigma}, sort_keys=True, separators=(",", ":"))
        return hashlib.sha256(resolved.encode()).hexdigest()[:8]


class EwmaForm(Form):
    """The moving average's weight on the newest point, and the multiple of its limits."""

    lam: Annotated[float, Field(gt=0, le=1, alias="lambda")]
    width: Annotated[float, Field(gt=0, le=100, alias="L")]
    limits: Annotated[Literal["exact", "asymptotic"], supported("exact", "asymptotic", later=())] = "exact"


class CusumForm(Form):
    """The cumulative sums' allowance, limit, start and ceiling."""

    k: Annotated[float, Field(ge=0)]
    h: Annotated[float, Field(gt=0)]
    head_start: Annotated[float, Field(ge=0)] = 0.0
    ceiling: Annotated[float, Field(ge=1)] | None = None

    @model_validator(mode="after")
    def consistent(self) -> Self:
        """A sum that starts at its limit would signal at once."""
        if self.head_start >= self.h:
            raise ValueError(f"head_start must be below h, is {self.head_start:g} and h {self.h:g}")
        return self


class Specification(Form):
    """What the customer was promised, judged on readings; never a control limit."""

    lower: Number | None = None
    upper: Number | None = None

    @model_validator(mode="after")
    def consistent(self) -> Self:
        """At least one side, and the lower one below."""
        if self.lower is None and self.upper is None:
            raise ValueError("needs lower, upper or both")
        if self.lower is not None and self.upper is not None and self.lower >= self.upper:
            raise ValueError(f"lower must be below upper, are {self.lower:g} and {self.upper:g}")
        return self


def labels_of(value: Any) -> Any:
    if isinstance(value, dict) and len(value) > MAX_LABELS:
        raise ValueError(f"may be {MAX_LABELS} at most, are {len(value)}")
    return value


def label_of(value: Any) -> Any:
    if not isinstance(value, str) or not value.isprintable() or not 1 <= len(value) <= MAX_LABEL:
        raise ValueError(f"a label's name must be 1 to {MAX_LABEL} printable characters, is {shown(value)}")
    return value


class Characteristic(Form):
    """A measured feature of a process."""

    id: Identifier
    topic: Topic
    payload: Payload | None = None
    unit: Text | None = None
    kind: Annotated[Literal["individuals"], supported("individuals", later=KINDS[1:])] = "individuals"
    subgroup: NotYet = None
    baseline: Baseline
    rules: Rules | None = None
    ewma: EwmaForm | None = None
    cusum: CusumForm | None = None
    side: Annotated[Literal["both", "high", "low"], supported("both", "high", "low", later=())] = "both"
    spread: Annotated[Literal["signal", "chart"], supported("signal", "chart", later=())] = "chart"
    favourable: Annotated[Literal["high", "low", "none"], supported("high", "low", "none", later=())] = "none"
    specification: Specification | None = None
    reaction: Text | None = None
    labels: Annotated[dict[Annotated[str, BeforeValidator(label_of)], Text], BeforeValidator(labels_of)] = Field(
        default_factory=dict[str, str]
    )
    limits: Annotated[Literal["sigma"], supported("sigma", later=("probability",))] = "sigma"
    transform: Annotated[Literal["none"], supported("none", later=("log", "square_root"))] = "none"
    quiet_points: Annotated[int, Field(ge=1, le=1_000_000)] = 8
    gap: Duration | None = None
    points_kept: Annotated[int, Field(ge=1, le=1000)] = 64
    retained: Annotated[Literal["skip", "accept"], supported("skip", "accept", later=())] = "skip"
    points_per_day: NotYet = None

    @model_validator(mode="before")
    @classmethod
    def complete(cls, value: Any) -> Any:
        """Fill in the default detector."""
        return with_default_detector(value) if isinstance(value, dict) else value

    @model_validator(mode="after")
    def consistent(self) -> Self:
        """Something must be able to signal."""
        if self.rules == () and self.ewma is None and self.cusum is None:
            raise ValueError("rules: [] needs ewma or cusum beside it, else nothing could ever signal")
        return self

    @cached_property
    def detector(self) -> Detector:
        """What the bank judges with."""
        cusum = None
        if self.cusum is not None:
            ceiling = float("inf") if self.cusum.ceiling is None else self.cusum.ceiling
            cusum = Cusum(self.cusum.k, self.cusum.h, self.cusum.head_start, ceiling)
        payload = self.payload
        return Detector(
            centre=self.baseline.centre,
            sigma=self.baseline.sigma,
            kind=self.kind,
            rules=dict(self.rules or ()),
            ewma=Ewma(self.ewma.lam, self.ewma.width, self.ewma.limits == "exact") if self.ewma else None,
            cusum=cusum,
            side=self.side,
            spread_signals=self.spread == "signal",
            gap=self.gap or 0,
            quiet_points=self.quiet_points,
            points_kept=self.points_kept,
            timed=payload is not None and payload.time is not None,
            sequenced=payload is not None and payload.sequence is not None,
            sequence_size=(payload.sequence_size or 0) if payload else 0,
        )
