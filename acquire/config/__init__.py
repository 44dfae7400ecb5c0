"""The configuration: one TOML file that describes the rig, validated once, frozen after."""

from acquire.config.loading import load, parse
from acquire.config.problems import ConfigError, Problem
from acquire.config.rig import Rig

__all__ = ["ConfigError", "Problem", "Rig", "load", "parse"]
