"""The faults a user can meet, each named for its cause, each with its exit code.

Every message is one sentence that says what is wrong, where, why, and what to do.
"""

from __future__ import annotations


class PartitaError(Exception):
    """Base of every error that is told to the user in one sentence."""

    exit_code = 1


class ModelError(PartitaError):
    """The model file or mapping does not describe a cluster."""

    exit_code = 3


class StudyError(PartitaError):
    """The study file or its parameters do not describe a fit."""

    exit_code = 3


class DataError(PartitaError):
    """A table of measured data cannot be used as stated."""

    exit_code = 3


class UnitsError(PartitaError):
    """A unit is unknown or does not fit its quantity."""

    exit_code = 3


class RangeError(PartitaError):
    """A temperature, field or other argument lies outside what is defined."""

    exit_code = 3


class UnavailableError(PartitaError):
    """The quantity asked for is not defined for this model by the method at hand."""

    exit_code = 3


class FileFormatError(PartitaError):
    """A file is not what it should be, is damaged, or cannot be read or written."""

    exit_code = 4


class CheckpointError(FileFormatError):
    """A checkpoint is another run's, in use, damaged, foreign, or cannot be written."""


class MemoryLimitError(PartitaError):
    """The work needs more memory than is allowed; nothing was allocated."""

    exit_code = 5


class SpectrumError(PartitaError):
    """A computed or stored spectrum fails its own check; it is not a result."""

    exit_code = 6


class WorkerError(PartitaError):
    """A scheduler or its workers do not answer, or died over the same piece of work."""

    exit_code = 7
