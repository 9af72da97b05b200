# Copyright 2026 The teleop_eval authors
# SPDX-License-Identifier: Apache-2.0
"""Errors a user can act on: one class for each thing that can be put right."""


class TeleopEvalError(Exception):
    """
    Base of every error that is the input's, the configuration's or the machine's fault.

    The text is one sentence: what is wrong, where, which value, what to do. Commands print
    it without a traceback and end with `exit_status`.
    """

    exit_status = 1


class UsageError(TeleopEvalError):
    """The command line cannot be understood."""

    exit_status = 2


class ConfigError(TeleopEvalError):
    """The parameter file names something unknown or gives a value that cannot be used."""


class DescriptionError(TeleopEvalError):
    """A robot description (URDF) cannot be used."""


class InputError(TeleopEvalError):
    """A message, topic or stream is not what the configuration says."""


class RecordingError(TeleopEvalError):
    """A recording cannot be read."""


class OutputError(TeleopEvalError):
    """A result cannot be written."""
