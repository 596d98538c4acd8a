"""Exports and plate maps as data: what an instrument or a person wrote, and where each value stands."""

from flows.stages.read.choice import choose_profile
from flows.stages.read.exports import read_export
from flows.stages.read.plate_maps import PlateMap, is_plate_map, read_plate_map
from flows.stages.read.raw import StagedRead
from flows.stages.read.trial import FirstValue, TrialPlate, TrialReport, trial_report

__all__ = [
    "FirstValue",
    "PlateMap",
    "StagedRead",
    "TrialPlate",
    "TrialReport",
    "choose_profile",
    "is_plate_map",
    "read_export",
    "read_plate_map",
    "trial_report",
]
