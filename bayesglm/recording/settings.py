"""Every key of ``study.toml``, with its type, unit, default and meaning.

The file is validated whole, before anything is read or written, and an unknown key is an error
that offers the nearest known one. The table of keys in ``docs/settings.md`` is made from here.
"""

from __future__ import annotations

from typing import Literal

from pydantic import BaseModel, ConfigDict, Field, model_validator

#: What a kernel is made of.
Basis = Literal["splines", "cosines", "lags", "exponentials"]


class Section(BaseModel):
    """A section of the study file: immutable, and closed to unknown keys."""

    model_config = ConfigDict(
        extra="forbid", frozen=True, populate_by_name=True, allow_inf_nan=False
    )


class StudySection(Section):
    """What the study is called."""

    name: str = Field(
        default="", description="name shown in the report; default the names of the cells"
    )
    notes: str = Field(default="", description="free text shown in the report")


class RowSelection(Section):
    """Ranges that mask single rows; the current of a masked row still acts afterwards."""

    current: str | None = Field(default=None, description="range of current, such as -100:25pA")
    voltage: str | None = Field(default=None, description="range of voltage, such as -90:-40mV")


class SelectSection(Section):
    """What part of a recording is fitted; everything stated must hold."""

    sweeps: str | None = Field(
        default=None, description="numbers of the sweeps used, such as 0-4,7"
    )
    current: str | None = Field(
        default=None, description="sweeps all of whose current lies in a range, such as -100:25pA"
    )
    rate: str | None = Field(
        default=None, description="sweeps with a firing rate in a range: 0:5Hz"
    )
    window: str | None = Field(
        default=None, description="time in the sweep that is used: 100:2400ms"
    )
    rows: RowSelection = Field(default=RowSelection(), description="ranges that mask single rows")


class RecordingSection(Section):
    """What the file cannot tell; blanks are shown to the author, never guessed."""

    holding_pA: float | None = Field(default=None, description="holding current, pA")
    holding_included: bool | None = Field(
        default=None, description="whether the recorded current includes the holding current"
    )
    junction_potential_mV: float | None = Field(
        default=None, description="liquid junction potential, mV"
    )
    junction_potential_applied: bool | None = Field(
        default=None,
        description="whether the voltages are corrected for it already (V_true = V_rec − LJP)",
    )
    bridge_MOhm: float | None = Field(default=None, description="bridge balance, MΩ")
    bridge_compensated: bool | None = Field(
        default=None, description="whether the bridge was balanced"
    )
    temperature_C: float | None = Field(default=None, description="temperature of the bath, °C")
    lowpass_Hz: float | None = Field(default=None, description="corner of the recording filter, Hz")
    synaptic_blockers: str | None = Field(
        default=None, description="blockers in the bath, in words"
    )
    internal_solution: str | None = Field(default=None, description="pipette solution, in words")
    contiguous: tuple[str, ...] = Field(
        default=(),
        description='numbers of sweeps that follow on each other without a gap, such as ["3-13"], '
        "where the file does not state their starts; holds for every file of the study",
    )
    spike_height_mV: float = Field(
        default=-10.0, description="a spike's peak exceeds this voltage, mV"
    )
    spike_slope_mV_per_ms: float = Field(
        default=10.0, gt=0, description="and its rise is at least this steep, mV/ms"
    )
    spike_dead_time_ms: float = Field(
        default=1.0,
        gt=0,
        description="of two peaks closer than this only the higher is a spike, ms",
    )
    spike_moment: Literal["crossing", "peak"] = Field(
        default="crossing",
        description="the spike's time: the first sample at or above spike_height_mV on the rise, "
        "or the peak",
    )
    select: SelectSection = Field(default=SelectSection(), description="what part is fitted")


class KernelSection(Section):
    """Shape of a kernel: its duration and what it is made of."""

    duration_ms: float | None = Field(
        default=None, gt=0, description="duration of the kernel, ms; default from the data"
    )
    basis: Basis = Field(
        default="splines",
        description="B-splines, raised cosines, one coefficient a lag, or a sum of exponentials "
        "whose time constants are fitted too",
    )
    weights: int | None = Field(
        default=None,
        ge=5,
        le=400,
        description="number of weights; default 14 splines (which carry exponentials too) or "
        "cosines, 60 lags (at most one a row); up to 60, of lags up to 400",
    )
    warp_ms: float = Field(
        default=2.0,
        gt=0,
        description="knots are even in log(1 + lag/warp_ms): smaller is finer early",
    )
    terms: int = Field(default=3, ge=1, le=6, description="number of exponentials")

    @model_validator(mode="after")
    def _weights_suit_the_basis(self) -> KernelSection:
        if self.weights is not None and self.weights > 60 and self.basis != "lags":
            raise ValueError(f"weights is {self.weights}; expected at most 60 {self.basis}")
        return self


class AfterSpikeSection(KernelSection):
    """Shape of the after-spike kernel and the lags reported in the table of features."""

    report_at_ms: tuple[float, ...] = Field(
        default=(30.0,), description="lags after a spike at which the kernel is reported, ms"
    )


class ElectrodeSection(Section):
    """The electrode's own drop of voltage, a nuisance."""

    include: bool = Field(
        default=True, description="fit a term in the current of the same bin (unbalanced bridge)"
    )
    duration_ms: float = Field(
        default=0.0,
        ge=0,
        lt=1,
        description="and a kernel of up to four bins of lags up to here, ms, for an electrode that "
        "charges; 0 for none",
    )

    @model_validator(mode="after")
    def _kernel_needs_the_term(self) -> ElectrodeSection:
        if self.duration_ms and not self.include:
            raise ValueError(
                f"duration_ms is {self.duration_ms:g} where include is false; expected 0"
            )
        return self


class KernelsSection(Section):
    """The kernels."""

    input: KernelSection = Field(default=KernelSection(), description="input kernel κ")
    after_spike: AfterSpikeSection = Field(
        default=AfterSpikeSection(), description="after-spike kernel η"
    )
    electrode: ElectrodeSection = Field(default=ElectrodeSection(), description="electrode term")


class ModelSection(Section):
    """Likelihood and what it rests on."""

    observe: Literal["voltage"] = Field(default="voltage", description="what is fitted")
    noise: Literal["calibrated", "white"] = Field(
        default="calibrated",
        description="calibrated by the variation between independent units, or white: bands that "
        "are several times too narrow on real cells, for comparison only",
    )
    row_ms: float | None = Field(
        default=None,
        gt=0,
        description="voltage is averaged over rows of this length, ms; default the smallest whole "
        "multiple of the step that is at least 0.5 ms",
    )
    spike_window_ms: tuple[float, float] = Field(
        default=(-1.0, 5.0), description="rows in this window around each spike are left out, ms"
    )
    leave_out_unsettled: bool = Field(
        default=True,
        description="leave out the first input kernel's length of each sweep that does not begin "
        "with 20 ms of constant current: what drove the cell before it is unknown",
    )
    duration_grid: bool = Field(
        default=True,
        description="fit other durations of the kernels too, and say how much rests on them",
    )
    window_sensitivity: bool = Field(
        default=True, description="fit other ends of the spike window too, and say the same"
    )
    sweep_offsets: bool = Field(default=True, description="each sweep has an offset of its own")
    sweep_drift: bool = Field(
        default=True,
        description="each sweep drifts along a straight line of its own; only with sweep_offsets",
    )
    units: Literal["auto", "sweep", "block"] = Field(
        default="auto", description="what counts as an independent unit"
    )
    block_ms: float | None = Field(
        default=None,
        gt=0,
        description="length of a block where units are blocks, ms; default from data",
    )

    @model_validator(mode="after")
    def _window_is_ordered(self) -> ModelSection:
        before, after = self.spike_window_ms
        if not before <= 0 < after:
            raise ValueError(
                f"spike_window_ms is [{before:g}, {after:g}]; expected [≤ 0, > 0] in ms"
            )
        return self


class PriorsSection(Section):
    """Priors in the units of what they describe; each is a row of the report's table."""

    input_sd: float = Field(
        default=20.0, gt=0, description="scale of the half-normal prior of the sd of κ, MΩ/ms"
    )
    after_spike_sd: float = Field(
        default=10.0, gt=0, description="scale of the half-normal prior of the sd of η, mV"
    )
    offset_mean: float = Field(default=-65.0, description="prior mean of the offset, mV")
    offset_sd: float = Field(default=20.0, gt=0, description="prior sd of the offset, mV")
    electrode_sd: float = Field(
        default=50.0, gt=0, description="prior sd of the electrode term, MΩ"
    )


class SamplingSection(Section):
    """The sampler and the intervals."""

    chains: int = Field(default=4, ge=2, description="number of chains")
    warmup: int = Field(default=300, ge=50, description="warm-up steps a chain")
    draws: int = Field(default=500, ge=50, description="kept draws a chain")
    target_accept: float = Field(default=0.8, gt=0.5, lt=1, description="target acceptance of NUTS")
    seed: int = Field(default=0, ge=0, description="seed of everything random")
    level: float = Field(default=0.9, gt=0, lt=1, description="level of every interval and band")


class Settings(Section):
    """The whole of ``study.toml``."""

    study: StudySection = StudySection()
    recording: RecordingSection = RecordingSection()
    kernels: KernelsSection = KernelsSection()
    model: ModelSection = ModelSection()
    priors: PriorsSection = PriorsSection()
    sampling: SamplingSection = SamplingSection()
