"""The measurement table's columns: final, only ever added to."""

from __future__ import annotations

IDENTITY: tuple[str, ...] = (
    "run", "capture", "kind", "device", "lot", "element", "driven_element", "reference",
)  # fmt: skip
CONDITIONS: tuple[str, ...] = (
    "bias_V", "load_ohm", "emitter_current_A", "pulse_width_s", "drive_period_s", "temperature_degC",
)  # fmt: skip
METHOD: tuple[str, ...] = ("levels", "estimator", "n_pulses")
QUANTITIES: tuple[str, ...] = (
    "low_V", "high_V", "amplitude_V", "rise_time_s", "fall_time_s", "t_plh_s", "t_phl_s", "width_in_s", "width_out_s",
    "pulse_width_distortion_s", "duty_in", "duty_out", "duty_cycle_distortion", "jitter_s", "dark_current_A",
)  # fmt: skip
OPTIONAL_QUANTITIES: tuple[str, ...] = (
    "on_delay_s", "on_time_s", "storage_time_s", "off_time_s", "current_transfer_ratio", "output_low_V",
    "photocurrent_A", "responsivity_A_per_W", "seen_rise_time_s", "seen_fall_time_s",
)  # fmt: skip
DEVICE: tuple[str, ...] = ("device_kind", "output_connection")
"""Added columns: what the fit and the verdict need to know of the device."""

KEY: tuple[str, ...] = ("run", "capture", "element")
TEXT: tuple[str, ...] = (
    "run", "capture", "kind", "device", "lot", "reference", "levels", "estimator", "flags", *DEVICE,
)  # fmt: skip
WHOLE: tuple[str, ...] = ("element", "driven_element", "n_pulses")
ALL_QUANTITIES: tuple[str, ...] = QUANTITIES + OPTIONAL_QUANTITIES


def twins(quantity: str) -> tuple[str, str, str]:
    """Names of the columns beside a quantity: standard uncertainty, lower and upper 95 % bound."""
    return f"u_{quantity}", f"{quantity}_lo95", f"{quantity}_hi95"


def table_columns() -> tuple[str, ...]:
    """All columns of the measurement table, in order."""
    return (
        IDENTITY + CONDITIONS + METHOD + QUANTITIES + ("flags",) + OPTIONAL_QUANTITIES
        + tuple(name for quantity in ALL_QUANTITIES for name in twins(quantity)) + DEVICE
    )  # fmt: skip
