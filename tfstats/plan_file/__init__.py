"""The plan file: one TOML file that says what is analysed and how."""

from tfstats.plan_file.plan import AnalysisPlan, DesignCall

__all__ = ["AnalysisPlan", "DesignCall"]
