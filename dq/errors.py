"""Every error that the tool raises on purpose, under one root.

An error's text is one line and says what is wrong, where, the value found, the
bound, and the remedy. The command line prints it and exits with ``exit_code``.
"""

from __future__ import annotations


class DqError(Exception):
    """Root of all deliberate errors; exit code 1 unless a child says otherwise."""

    exit_code = 1


class InputError(DqError):
    """The user's input cannot be used: exit code 2 and nothing is written."""

    exit_code = 2


class ConfigError(InputError):
    """A key of the configuration is unknown, missing, or out of its bounds."""


class ChannelError(InputError):
    """A channel's name, header or samples cannot be used.

    In a night it costs that channel, not the night.
    """


class SegmentError(InputError):
    """A segment or a segment file breaks the half-open law."""


class PlanError(InputError):
    """No tile plan fits the band, the sample rate or the length of the data."""


class TrainingError(InputError, ValueError):
    """Labels or features from which no sorter can be trained, or that a model refuses.

    Also a ``ValueError``, which is what scikit-learn expects of an estimator.
    """


class ModelError(InputError, ValueError):
    """A model file cannot be used: damaged, of another version, or untrusted."""


class NoDataError(InputError):
    """No usable data of a required channel lie in the requested range."""


class BusyError(InputError):
    """Another run holds the output folder."""


class OutputError(DqError):
    """The output could not be written (disk full, file system lost)."""
