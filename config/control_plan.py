"""The control plan: what is watched, against which limits, by which rules, and who minds."""

from __future__ import annotations

from pathlib import Path
from typing import Literal

from pydantic import Field, field_validator, model_validator

from config.settings import Strict
from config.values import EMAIL, RULE_NAME, Duration

WESTERN_ELECTRIC = ("beyond-3s", "2of3-beyond-2s", "4of5-beyond-1s", "8-one-side")

SCALAR_STATISTICS = (
    "mean",
    "within-wafer",
    "wafer-to-wafer",
    "tilt-x",
    "tilt-y",
    "bowl",
    "map-distance",
)
OVERLAY_STATISTICS = (
    "translation-x",
    "translation-y",
    "scale-x",
    "scale-y",
    "rotation-x",
    "rotation-y",
    "field-scale-x",
    "field-scale-y",
    "field-rotation-x",
    "field-rotation-y",
    "residual",
)
# Charted where the plan names none: all that the readings allow.
DEFAULT_SCALAR_STATISTICS = ("mean", "within-wafer", "wafer-to-wafer", "map-distance")
OVERLAY_UNITS = {
    "translation": "nm",
    "scale": "ppm",
    "rotation": "urad",
    "field-scale": "ppm",
    "field-rotation": "urad",
    "residual": "nm",
}


class FilmPlan(Strict):
    """Optics of a resist film, for the CD change that a thickness change implies."""

    refractive_index: float = Field(gt=1, lt=4, description="Index of the resist at exposure.")
    wavelength_nm: float = Field(gt=100, lt=1000, description="Wavelength of exposure.")
    swing_amplitude_nm: float | None = Field(
        default=None, gt=0, description="Half the peak-to-peak CD swing."
    )


class SpinPlan(Strict):
    """The spin step behind a film, for the trim that returns it to target."""

    speed_rpm: float = Field(gt=0, description="Speed in use.")
    exponent: float = Field(
        default=0.5, gt=0, lt=2, description="thickness ~ speed^-exponent; 1/2 by theory."
    )
    exponent_sd: float = Field(default=0.05, ge=0, description="Uncertainty of the exponent.")
    lowest_rpm: float = Field(default=1200.0, gt=0, description="Lowest speed allowed.")
    highest_rpm: float = Field(default=4800.0, gt=0, description="Highest speed allowed.")


class ChartPlan(Strict):
    """Designs of memory charts. `yellowbay check` says whether they can exist; the nightly pass
    does not chart them (triage pools small shifts over points and streams by itself)."""

    ewma: tuple[float, float] | None = Field(default=None, description="[lambda, L]")
    cusum: tuple[float, float] | None = Field(default=None, description="[k, h] in sigmas")


class Characteristic(Strict):
    """One thing that is watched."""

    name: str = Field(min_length=1, description="Name on charts and in commands.")
    parameter: str = Field(min_length=1, description="Parameter as in the readings.")
    unit: str = Field(min_length=1, description="Unit of target and specs.")
    where: dict[str, str] = Field(
        default_factory=dict, description="Exact matches on context columns."
    )
    stream_by: tuple[str, ...] = Field(
        default=("tool",), description="One process stream for each combination seen."
    )
    point: Literal["lot", "wafer"] = Field(default="lot", description="What a point stands for.")
    statistics: tuple[str, ...] | None = Field(
        default=None, description="Charted statistics; without it all that the readings allow."
    )
    target: float | None = Field(default=None, description="Where the process should run.")
    lower_spec: float | None = Field(default=None, description="Lower limit of the specification.")
    upper_spec: float | None = Field(default=None, description="Upper limit of the specification.")
    rules: tuple[str, ...] = Field(default=WESTERN_ELECTRIC, description="Run rules.")
    baseline_points: int = Field(
        default=30, ge=5, le=1000, description="Points that set the first limits of a stream."
    )
    expected_every: Duration | None = Field(
        default=None, description="A stream silent for longer is an excursion."
    )
    action_plan: str | None = Field(
        default=None, description="Text, or the name of a Markdown file beside the plan."
    )
    owners: tuple[str, ...] = Field(default=(), description="Addresses that mind it.")
    film: FilmPlan | None = None
    spin: SpinPlan | None = None
    chart: ChartPlan = ChartPlan()
    gauge_sd: float | None = Field(
        default=None, ge=0, description="Sd of the gauge, for capability without its share."
    )

    @property
    def is_overlay(self) -> bool:
        """Whether it is fed by readings of overlay_x and overlay_y."""
        return self.parameter == "overlay"

    @property
    def parameters(self) -> tuple[str, ...]:
        """Parameters of the readings that feed it."""
        return ("overlay_x", "overlay_y") if self.is_overlay else (self.parameter,)

    @property
    def charted(self) -> tuple[str, ...]:
        """Statistics that are charted where the readings allow."""
        if self.statistics is not None:
            return self.statistics
        return OVERLAY_STATISTICS if self.is_overlay else DEFAULT_SCALAR_STATISTICS

    def unit_of(self, statistic: str) -> str:
        """Unit of a statistic: its own for overlay terms, none for a map distance."""
        if self.is_overlay:
            return OVERLAY_UNITS[statistic.removesuffix("-x").removesuffix("-y")]
        return "1" if statistic == "map-distance" else self.unit

    @field_validator("rules")
    @classmethod
    def _known_rules(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        for rule in value:
            if not RULE_NAME.fullmatch(rule):
                raise ValueError(
                    f"{rule!r} is no rule; write beyond-3s, 2of3-beyond-2s, 8-one-side, "
                    "6-trending or 15-within-1s, with your own numbers"
                )
        return value

    @field_validator("owners")
    @classmethod
    def _addresses(cls, value: tuple[str, ...]) -> tuple[str, ...]:
        for one in value:
            if not EMAIL.fullmatch(one):
                raise ValueError(f"{one!r} is no mail address; write name@example.com")
        return value

    @model_validator(mode="after")
    def _consistent(self) -> Characteristic:
        known = OVERLAY_STATISTICS if self.is_overlay else SCALAR_STATISTICS
        for statistic in self.statistics or ():
            if statistic not in known:
                raise ValueError(f"no statistic {statistic!r}; write some of {', '.join(known)}")
        low, high = self.lower_spec, self.upper_spec
        if low is not None and high is not None and not low < high:
            raise ValueError("lower_spec must be below upper_spec")
        if self.target is not None and (
            (low is not None and self.target < low) or (high is not None and self.target > high)
        ):
            raise ValueError("target lies outside the specification")
        return self


class ControlPlan(Strict):
    """The whole of `control_plan.toml`."""

    characteristic: tuple[Characteristic, ...]

    @field_validator("characteristic")
    @classmethod
    def _by_name(cls, value: tuple[Characteristic, ...]) -> tuple[Characteristic, ...]:
        if not value:
            raise ValueError("nothing is watched; write at least one [[characteristic]]")
        names = [c.name for c in value]
        twice = sorted({n for n in names if names.count(n) > 1})
        if twice:
            raise ValueError(f"two characteristics are named {twice[0]!r}; give each its own name")
        return value

    def named(self, name: str) -> Characteristic | None:
        """The characteristic of that name, or None."""
        return next((c for c in self.characteristic if c.name == name), None)


def action_plan_text(characteristic: Characteristic, folder: Path) -> str | None:
    """Text of the action plan, read from its Markdown file where it names one.

    Raises FileNotFoundError when the named file is missing.
    """
    plan = characteristic.action_plan
    if plan is None or not plan.endswith(".md") or "\n" in plan:
        return plan
    return (folder / plan).read_text("utf-8")
