"""The door for study files: whatever passes it is complete, consistent and in SI units."""

from tolsim.study.file import StudyFile, load_study, open_study, read_study

__all__ = ["StudyFile", "load_study", "open_study", "read_study"]
