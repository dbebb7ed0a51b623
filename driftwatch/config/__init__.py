"""The TOML file as typed models; every error at once, each with its key and remedy.

`load` reads a file, `loads` a text. What the file may say although this version does not do it, `unserved` tells;
what a recording's rate and inputs contradict, `check_rate`.
"""

from driftwatch.config.cross import check_rate, is_simulated, rate_of, record_cautions
from driftwatch.config.endpoints import BEYOND, LOOPBACK, check_endpoint, is_loopback, unguarded
from driftwatch.config.errors import ConfigError, Problem
from driftwatch.config.load import from_document, load, loads
from driftwatch.config.models import (
    AlertConfig,
    BusConfig,
    ChannelConfig,
    Configuration,
    DaemonConfig,
    RecordConfig,
    RegimeConfig,
    RegimeWhen,
    SensorConfig,
    StationConfig,
    StoreConfig,
)
from driftwatch.config.modes import BandConfig, ModeConfig
from driftwatch.config.sensors import sensor_remarks
from driftwatch.config.serve import unserved
from driftwatch.config.sources import (
    FeedSourceConfig,
    RecordingSourceConfig,
    ResonatorConfig,
    SimulatedSourceConfig,
    SoundcardSourceConfig,
    SourceConfig,
    ToneConfig,
)
from driftwatch.config.values import UNIT_OF, Profile, Quantity, Span

__all__ = [
    "BEYOND",
    "LOOPBACK",
    "UNIT_OF",
    "AlertConfig",
    "BandConfig",
    "BusConfig",
    "ChannelConfig",
    "ConfigError",
    "Configuration",
    "DaemonConfig",
    "FeedSourceConfig",
    "ModeConfig",
    "Problem",
    "Profile",
    "Quantity",
    "RecordConfig",
    "RecordingSourceConfig",
    "RegimeConfig",
    "RegimeWhen",
    "ResonatorConfig",
    "SensorConfig",
    "SimulatedSourceConfig",
    "SoundcardSourceConfig",
    "SourceConfig",
    "Span",
    "StationConfig",
    "StoreConfig",
    "ToneConfig",
    "check_endpoint",
    "check_rate",
    "from_document",
    "is_loopback",
    "is_simulated",
    "load",
    "loads",
    "rate_of",
    "record_cautions",
    "sensor_remarks",
    "unguarded",
    "unserved",
]
