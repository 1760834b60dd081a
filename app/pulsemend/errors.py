"""The exceptions of Pulsemend, one tree.

    PulsemendError            one line: what, where, what to do; carries its exit code
      UsageError              2    the command was used wrongly
      InputError              3    something of the user's cannot be used
        RecordingError             a file that should be a recording
          UnknownFormat            no reader for it, or the extension lies
          MissingPart              a file that belongs to the recording is not there
          DamagedRecording         truncated, or its header and its samples disagree
          UnusableSamples          not finite
          UnusableChannels         names twice, no channel of a usable type
        SettingError               a plan or marks key: path, allowed, received, line
          PlanError
          MarksError
        LogError                   a behavioural log: no table, no such column, no such value
        NoEpochs                   nothing is kept, so nothing is written
        SetError                   the folder of an epoch set: exists already, is none, is damaged
        ChangedOnDisk              a plan or marks file that somebody else changed since it was read
        OutOfSpace                 the disk, or a format's size limit
      Cancelled               130  stopped by the user

A fault of ours is any other exception: the command line turns it into exit 4.
"""

from __future__ import annotations


class PulsemendError(Exception):
    """Base of all errors meant for the user.

    Parameters
    ----------
    what : str
        What is wrong, one short sentence without a final stop.
    where : str
        File, key, channel or sample it concerns; empty if there is none.
    todo : str
        What the user can do about it; empty if the first part says it.
    """

    exit_code = 4

    def __init__(self, what: str, *, where: str = "", todo: str = "") -> None:
        self.what = what
        self.where = where
        self.todo = todo
        super().__init__(what)

    def __str__(self) -> str:
        text = f"{self.where}: {self.what}" if self.where else self.what
        return f"{text}. {self.todo}" if self.todo else text

    def __reduce__(self) -> tuple[object, ...]:
        # The default would call the class with `args` alone; subclasses have keyword-only data.
        return (_rebuild, (type(self), self.args, self.__dict__))


def _rebuild(
    kind: type[PulsemendError], args: tuple[object, ...], state: dict[str, object]
) -> PulsemendError:
    """Put a pickled error together again without calling its constructor."""
    error = kind.__new__(kind, *args)
    error.args = args
    error.__dict__.update(state)
    return error


class UsageError(PulsemendError):
    """The command was used wrongly."""

    exit_code = 2


class InputError(PulsemendError):
    """Something of the user's cannot be used as it is."""

    exit_code = 3


class RecordingError(InputError):
    """A file that should be a recording."""


class UnknownFormat(RecordingError):
    """No reader knows the file, or its contents are not what its extension says."""


class MissingPart(RecordingError):
    """A file that belongs to the recording is not there or cannot be opened."""


class DamagedRecording(RecordingError):
    """The file is truncated, or its header and its samples disagree."""


class UnusableSamples(RecordingError):
    """Samples that are not finite."""


class UnusableChannels(RecordingError):
    """Channel names that occur twice, or no channel of a usable type."""


class SettingError(InputError):
    """A key of a plan or of marks.

    Parameters
    ----------
    key : str
        Full path of the key, e.g. ``epochs.rule[2].start_s``.
    problem : str
        What is wrong with it.
    allowed, received : str
        What may stand there and what does; empty where that says nothing.
    line : int or None
        Line in the file, from 1.
    path : str
        The file's name as the user gave it; empty for a plan that was never a file.
    """

    def __init__(
        self,
        key: str,
        problem: str,
        *,
        allowed: str = "",
        received: str = "",
        line: int | None = None,
        path: str = "",
    ) -> None:
        self.key = key
        self.problem = problem
        self.allowed = allowed
        self.received = received
        self.line = line
        self.path = path
        place = path if line is None else f"{path or 'the text'}, line {line}"
        parts = [f"{key}: {problem}" if key else problem]
        if allowed:
            parts.append(f"allowed: {allowed}")
        if received:
            parts.append(f"received: {received}")
        super().__init__("; ".join(parts), where=place)


class PlanError(SettingError):
    """A key of a plan."""


class MarksError(SettingError):
    """A key of a recording's marks, or marks that belong to another recording."""


class LogError(InputError):
    """A behavioural log that cannot be read as a table, or a column that does not hold what it should."""


class NoEpochs(InputError):
    """No epoch is kept, so there is nothing to write."""


class SetError(InputError):
    """The folder of an epoch set: it exists already, is none, or is damaged."""


class ChangedOnDisk(InputError):
    """A plan or marks file that changed on the disk since it was read, so it is not written over.

    Parameters
    ----------
    path : str
        The file.
    ours, theirs : str
        The text that was to be written, and the one found.
    """

    def __init__(self, path: str, *, ours: str, theirs: str) -> None:
        self.path = path
        self.ours = ours
        self.theirs = theirs
        super().__init__(
            "was changed by somebody else since it was read",
            where=path,
            todo="Keep that one, write over it, or save under another name",
        )


class OutOfSpace(InputError):
    """The disk is too small, or a format cannot hold so much."""


class Cancelled(PulsemendError):
    """Stopped by the user."""

    exit_code = 130

    def __init__(self) -> None:
        super().__init__("cancelled")
