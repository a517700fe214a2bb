"""The one exception tree.

::

    NearhandError
    ├── WireError            what arrived on a lane cannot be used           wire.*
    ├── ConfigError          a TOML file or an option cannot be used         config.*
    ├── UnknownNameError     no rig, episode, version or job of that name    unknown.*
    ├── ConflictError        the state forbids it: old, replaced, taken      conflict.*
    ├── RefusedError         understood and declined: gate, role, limit      refused.*
    ├── PolicyFormatError    a policy file is not what its header says       policy.*
    ├── StoreError           the data folder or its database is at fault     store.*
    ├── LearningError        a distillation cannot go on                     learn.*
    └── LinkError            the other end is silent, gone or replied badly  link.*

Each error carries a stable ``code`` that travels on the wire and a sentence that says what was wrong, what was
expected and what to do. Foreign exceptions are translated once, where they enter (``raise … from``).
"""

from __future__ import annotations


class NearhandError(Exception):
    """Any failure that Nearhand reports; never raised itself.

    Args:
        message: what was wrong, what was expected, what to do.
        code: stable dotted code; the class default when left out.
    """

    default_code = "error"

    def __init__(self, message: str, *, code: str | None = None) -> None:
        super().__init__(message)
        self.message = message
        self.code = code or self.default_code

    def __str__(self) -> str:
        return self.message


class WireError(NearhandError):
    """A frame that is no message: truncated, oversized, of unknown kind, of wrong version or shape."""

    default_code = "wire.malformed"


class ConfigError(NearhandError):
    """A configuration file or option that cannot be used."""

    default_code = "config.invalid"


class UnknownNameError(NearhandError):
    """A rig, episode, version or job that does not exist here."""

    default_code = "unknown.name"


class ConflictError(NearhandError):
    """A request that the present state forbids."""

    default_code = "conflict.state"


class RefusedError(NearhandError):
    """A request that was understood and declined."""

    default_code = "refused.request"


class PolicyFormatError(NearhandError):
    """A policy file with a wrong hash, shape, size or header."""

    default_code = "policy.format"


class StoreError(NearhandError):
    """The data folder or its database is missing, damaged, full or in use."""

    default_code = "store.failed"


class LearningError(NearhandError):
    """A distillation that cannot start or go on."""

    default_code = "learn.failed"


class LinkError(NearhandError):
    """The other end of a lane is silent, gone, or answered with an error."""

    default_code = "link.failed"


ERROR_CLASSES: tuple[type[NearhandError], ...] = (
    WireError,
    ConfigError,
    UnknownNameError,
    ConflictError,
    RefusedError,
    PolicyFormatError,
    StoreError,
    LearningError,
    LinkError,
)


def error_from_code(code: str, message: str) -> NearhandError:
    """Return the error that a wire code stands for, for a client to raise."""
    family = code.split(".", 1)[0]
    for cls in ERROR_CLASSES:
        if cls.default_code.split(".", 1)[0] == family:
            return cls(message, code=code)
    return LinkError(message, code=code)
