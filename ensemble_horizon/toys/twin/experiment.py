"""The record of a twin experiment: which truth, which forecasts, which errors."""

from __future__ import annotations

from collections.abc import Mapping
from dataclasses import dataclass
from functools import cached_property

import numpy as np

from ensemble_horizon.checks import require_choice, require_positive
from ensemble_horizon.errors import ArgumentError
from ensemble_horizon.toys.dynamics import System
from ensemble_horizon.toys.perturbations.method import require_whole, steps_in
from ensemble_horizon.toys.twin.displacement import Displacement

# Hours in a unit of time of systems without a clock: by their author's choice, or those of a day.
NOMINAL_HOURS = {"lorenz-96": 120.0, "lorenz-96-two-scales": 120.0}
NOMINAL_DAY = 24.0


@dataclass(frozen=True)
class ModelVersion:
    """A version of the forecast model: the system, and its step where it has one of its own."""

    system: System
    dt: float | None = None


@dataclass(frozen=True, kw_only=True)
class TwinExperiment:
    """A truth, analyses of it, and ensembles of every version of a model from many starts.

    All times are in the ``time_units`` of ``system``, counted from the first start. The analysis is
    truth plus error; it is the control. Members are the control plus perturbations, made in the
    truth's variables and carried over to every version, so that all versions begin alike.

    Parameters
    ----------
    system : System
        What makes the truth.
    versions : mapping of str to ModelVersion
        The forecast models by name, related to ``system`` (its ``carried_over`` must accept them).
    starts : int
    start_spacing : float
        A multiple of ``lead_spacing``.
    leads : int
        Lead times kept, the first of which is 0.
    lead_spacing : float
        A multiple of ``dt``. There is an analysis every ``lead_spacing``, too.
    members : int
        Size of the ensemble, all told.
    analyses : Displacement
        Error of the analyses.
    perturbations : Displacement, optional
        Perturbations of members; like the error of the analyses if left out. Truth and members are
        then spread alike about the analysis, which is what a consistent ensemble is.
    control : bool
        Member 0 is the control itself, unperturbed. It is not exchangeable with the others.
    seed : int
        All random numbers follow from it, each start's from its own stream.
    dt : float, optional
        Step, ``system.step`` if left out.
    spin_up : float, optional
        Time that the truth runs before anything is kept, ``system.spin_up`` if left out.
    climate : float
        Time before the first start that is kept for the climatology of the truth.
    hours_per_time_unit : float, optional
        For systems without a clock; 24 if left out, 120 for Lorenz's ring of 1996.

    Raises
    ------
    ArgumentError
        If an argument is out of range or does not fit the others.

    Examples
    --------
    >>> from ensemble_horizon import toys
    >>> experiment = TwinExperiment(
    ...     system=toys.system("lorenz-63"),
    ...     versions={"A": ModelVersion(toys.system("lorenz-63", rho=28.5))},
    ...     starts=3, start_spacing=1.0, leads=5, lead_spacing=0.25, members=4, seed=1,
    ...     analyses=Displacement(amplitude=0.1),
    ... )
    >>> experiment.analysis_count, experiment.hours
    (13, 24.0)
    """

    system: System
    versions: Mapping[str, ModelVersion]
    starts: int
    start_spacing: float
    leads: int
    lead_spacing: float
    members: int
    analyses: Displacement
    perturbations: Displacement | None = None
    control: bool = False
    seed: int = 0
    dt: float | None = None
    spin_up: float | None = None
    climate: float = 0.0
    hours_per_time_unit: float | None = None

    def __post_init__(self) -> None:
        for name, least in (("starts", 1), ("leads", 2), ("members", 2), ("seed", 0)):
            require_whole(getattr(self, name), name, least)
        require_positive(self.climate, "climate", zero=True)
        if self.spin_up is not None:
            require_positive(self.spin_up, "spin_up", zero=True)
        _require_multiple(self.start_spacing, self.lead_spacing)
        self._check_clock()
        self._check_displacements()
        if not self.versions:
            raise ArgumentError(
                "versions", expected="at least one", found="none", remedy="name a version"
            )
        for name in self.versions:
            self.steps_per_lead(name)
            _require_relative(self.system, name, self.versions[name].system)

    @property
    def step(self) -> float:
        """Step of the truth in time units."""
        return self.system.step if self.dt is None else require_positive(self.dt, "dt")

    @property
    def lead_steps(self) -> int:
        """Steps of the truth from one lead, or analysis, to the next."""
        return steps_in(require_positive(self.lead_spacing, "lead_spacing"), self.step,
                        "lead_spacing")  # fmt: skip

    @property
    def start_steps(self) -> int:
        """Steps of the truth from one start to the next."""
        return round(self.start_spacing / self.lead_spacing) * self.lead_steps

    @property
    def analysis_count(self) -> int:
        """Analyses from the first start to the last valid time."""
        return (self.starts - 1) * self.start_steps // self.lead_steps + self.leads

    @property
    def hours(self) -> float:
        """Hours in a unit of time, real or nominal."""
        own = self.system.hours_per_time_unit
        if own is not None:
            return own
        given = self.hours_per_time_unit
        return NOMINAL_HOURS.get(self.system.name, NOMINAL_DAY) if given is None else given

    @property
    def members_perturbed_by(self) -> Displacement:
        """The displacement of the members."""
        return self.analyses if self.perturbations is None else self.perturbations

    @cached_property
    def lags(self) -> tuple[int, ...]:
        """Steps before a moment at which its analysis and members need the truth."""
        members = self.members_perturbed_by.past_lags(self.step, self.analyses)
        return tuple(sorted({*self.analyses.lags(self.step), *members}))

    def lead_hours(self) -> np.ndarray:
        """Return the leads (leads,) in hours."""
        return np.round(np.arange(self.leads) * self.lead_spacing * self.hours, 9)

    def version(self, name: str) -> ModelVersion:
        """Return the version called ``name``."""
        return self.versions[require_choice(name, self.versions, "version")]

    def steps_per_lead(self, version: str) -> tuple[float, int]:
        """Return the step of a version, and how many make up the spacing of leads."""
        model = self.version(version)
        dt = model.dt
        if dt is None:
            dt = self.step if type(model.system) is type(self.system) else model.system.step
        return dt, steps_in(self.lead_spacing, require_positive(dt, "dt"), "lead_spacing")

    def _check_clock(self) -> None:
        own, given = self.system.hours_per_time_unit, self.hours_per_time_unit
        if given is not None:
            require_positive(given, "hours_per_time_unit")
        if own is not None and given not in (None, own):
            raise ArgumentError(
                "hours_per_time_unit",
                expected=f"{own:g}, as the time of {self.system.name} is in "
                f"{self.system.time_units}",
                found=f"{given:g}",
                remedy="leave it out",
            )
        seconds = self.lead_spacing * self.hours * 3600
        if abs(seconds - round(seconds)) > 1e-6:
            raise ArgumentError(
                "lead_spacing",
                expected=f"a whole number of seconds at {self.hours:g} hours per unit of time",
                found=f"{seconds:g} s",
                remedy="take another lead_spacing or hours_per_time_unit",
            )

    def _check_displacements(self) -> None:
        members = self.members_perturbed_by
        for how in (self.analyses, members):
            how.check(self.system)
        if self.analyses.from_analyses:
            raise ArgumentError(
                "analyses: method",
                expected="a method that needs no earlier analyses",
                found=repr(self.analyses.method),
                remedy="take 'gaussian' or 'correlated', say",
            )
        if members.paired and (self.members - self.control) % 2:
            raise ArgumentError(
                "members",
                expected="an even number of perturbed members, as they come in pairs",
                found=str(self.members - self.control),
                remedy="take one more or less, or no pairs",
            )
        ages = members.lags(self.step) if members.from_analyses else ()
        if any(age % self.lead_steps for age in ages):
            raise ArgumentError(
                "perturbations: ages",
                expected=f"multiples of lead_spacing {self.lead_spacing:g}, the times of analyses",
                found=str(members.options.get("ages")),
                remedy="correct the ages",
            )


def _require_multiple(spacing: float, lead_spacing: float) -> None:
    require_positive(spacing, "start_spacing")
    ratio = spacing / require_positive(lead_spacing, "lead_spacing")
    if round(ratio) < 1 or abs(ratio - round(ratio)) > 1e-6:
        raise ArgumentError(
            "start_spacing",
            expected=f"a multiple of lead_spacing {lead_spacing:g}, so that starts have analyses",
            found=f"{spacing:g}",
            remedy=f"take {max(1, round(ratio)) * lead_spacing:g}",
        )


def _require_relative(truth: System, name: str, model: System) -> None:
    try:
        truth.carried_over(truth.default_state(), model)
    except ArgumentError as error:
        raise ArgumentError(
            f"version {name}", expected=error.expected, found=error.found, remedy=error.remedy
        ) from error
