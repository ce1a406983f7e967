"""Serial: successive starts are not independent, and what follows for means over starts."""

from ensemble_horizon.serial.block_length import BlockLengths, block_lengths
from ensemble_horizon.serial.long_run import effective_size, long_run_variance
from ensemble_horizon.serial.mean import (
    LEAST_STARTS,
    REASON_ATTRIBUTES,
    MeanNoise,
    Reason,
    SerialMean,
    mean_noise,
    serial_mean,
)
from ensemble_horizon.serial.resampling import moving_block_index, stationary_index

__all__ = [
    "LEAST_STARTS",
    "REASON_ATTRIBUTES",
    "BlockLengths",
    "MeanNoise",
    "Reason",
    "SerialMean",
    "block_lengths",
    "effective_size",
    "long_run_variance",
    "mean_noise",
    "moving_block_index",
    "serial_mean",
    "stationary_index",
]
