"""Per-trial power as it lies on disk or comes from raw trials; the only room that opens input data."""

from tfstats.power_files.file_contents import FileContents, looked_into
from tfstats.power_files.formats import FORMATS, FileFormat, names_in_file
from tfstats.power_files.many_files import PowerFiles
from tfstats.power_files.morlet_transform import morlet_power
from tfstats.power_files.power_reading import read_power
from tfstats.power_files.power_writing import write_power
from tfstats.power_files.study_tables import read_electrodes, read_participants
from tfstats.power_files.subject_cache import SubjectCache
from tfstats.power_files.trial_power import TrialPower

__all__ = [
    "FORMATS",
    "FileContents",
    "FileFormat",
    "PowerFiles",
    "SubjectCache",
    "TrialPower",
    "looked_into",
    "morlet_power",
    "names_in_file",
    "read_electrodes",
    "read_participants",
    "read_power",
    "write_power",
]
