"""Simulated studies with a known answer: the one generator that the demo, the tests and planning share."""

from tfstats.simulated_power.lamp_study import (
    LAMP_GROUPS,
    lamp_electrodes,
    lamp_participants,
    lamp_sequences,
)
from tfstats.simulated_power.study_design import PlantedEffect, StudyDesign, planted_decibels
from tfstats.simulated_power.trial_generator import simulate_study, simulate_subject

__all__ = [
    "LAMP_GROUPS",
    "PlantedEffect",
    "StudyDesign",
    "lamp_electrodes",
    "lamp_participants",
    "lamp_sequences",
    "planted_decibels",
    "simulate_study",
    "simulate_subject",
]
