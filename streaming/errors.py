"""The error tree of the engine. Every message holds the offending values and what to do.

StreamError
├── DeclarationError   the run cannot be set up as declared
├── SnapshotError      a batch cannot be absorbed; the stream is unchanged
├── NotReadyError      asked for a result before the first block was applied
├── ClosedError        a batch after close
└── CheckpointError    a checkpoint is damaged, incomplete or of another version
"""


class StreamError(Exception):
    """Base of all errors raised on purpose by ``streaming``."""


class DeclarationError(StreamError, ValueError):
    """The declaration, the weights or the positions do not fit together."""


class SnapshotError(StreamError, ValueError):
    """A batch has the wrong shape, dtype, times or values; nothing was absorbed."""


class NotReadyError(StreamError):
    """No block has been applied yet, so there is no basis to read from."""


class ClosedError(StreamError):
    """The stream was closed; it takes no more snapshots."""


class CheckpointError(StreamError):
    """A checkpoint cannot be read back; the message names the file."""
