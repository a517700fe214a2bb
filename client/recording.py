"""The control loop's end of a recording: copying a sample into memory, and nothing else."""

from __future__ import annotations

from collections import deque
from collections.abc import Sequence
from typing import get_args

import numpy as np
from numpy.typing import NDArray

from nearhand.client.spool import Ending, Rows, row_type
from nearhand.service.bus.intake_messages import Outcome
from nearhand.service.errors import ConfigError, ConflictError, NearhandError, StoreError

BLOCK_ROWS = 1024
MEMORY_LIMIT_BYTES = 256 * 1024 * 1024

Numbers = NDArray[np.floating] | Sequence[float]


class _Block:
    """Room for a fixed number of samples; ``filled`` grows only after a sample is whole."""

    __slots__ = ("actions", "filled", "observations", "rows", "taken", "times")

    def __init__(self, dtype: np.dtype[np.void]) -> None:
        self.rows: Rows = np.zeros(BLOCK_ROWS, dtype=dtype)
        self.times = self.rows["time"]
        self.observations = self.rows["obs"]
        self.actions = self.rows["act"]
        self.filled = 0
        self.taken = 0

    def touch(self) -> None:
        """Make the memory real now, so that the control loop never waits for it."""
        self.rows.view(np.uint8)[:] = 0


class Recording:
    """One episode being recorded; made by ``DemonstrationStream.open`` and used by one thread.

    ``add`` copies and returns: no lock, no disk, no socket. Another thread takes the samples over.

    Attributes:
        episode: its identifier.
        samples: how many samples were added.
    """

    def __init__(self, episode: str, observations: int, actions: int) -> None:
        self.episode = episode
        self.samples = 0
        self._n = observations
        self._m = actions
        self._dtype = row_type(observations, actions)
        self._most_blocks = max(4, MEMORY_LIMIT_BYTES // (BLOCK_ROWS * self._dtype.itemsize))
        self._block = _Block(self._dtype)
        self._block.touch()
        self._blocks = deque([self._block])
        self._spare: _Block | None = None
        self._ending: Ending | None = None
        self._failure: NearhandError | None = None
        self._abandoned = False

    @property
    def ended(self) -> bool:
        """Whether no more samples can be added."""
        return self._ending is not None or self._failure is not None or self._abandoned

    @property
    def has_failed(self) -> bool:
        """Whether the spool's disk has ended it."""
        return self._failure is not None

    def add(self, time_s: float, observation: Numbers, action: Numbers) -> None:
        """Add one sample.

        Args:
            time_s: the rig's time.
            observation: (n,) what was observed when the action began, in the rig's units.
            action: (m,) what was applied.

        Raises:
            ConfigError: a vector has the wrong size.
            ConflictError: the recording has ended.
            StoreError: the spool's disk has failed or is too far behind.
        """
        block = self._block
        row = block.filled
        if row == BLOCK_ROWS:
            block, row = self._next_block(), 0
        if len(observation) != self._n or len(action) != self._m or self.ended:
            raise self._refusal(len(observation), len(action))
        try:
            block.times[row] = time_s
            block.observations[row] = observation
            block.actions[row] = action
        except (ValueError, TypeError) as error:
            raise ConfigError(
                f"recording {self.episode}: a sample is no time and two vectors of numbers: {error}",
                code="config.channels",
            ) from error
        block.filled = row + 1
        self.samples += 1

    def close(self, outcome: Outcome, final_observation: Numbers, terminated: bool = False) -> None:
        """End the episode; an episode without samples is discarded.

        Args:
            outcome: ``success``, ``failure``, ``cut`` or ``unknown``.
            final_observation: (n,) what the last action brought.
            terminated: a true terminal state was reached, so that nothing could have followed.

        Raises:
            ConfigError: the outcome is none of these, or the vector has the wrong size.
            ConflictError: the recording has ended.
        """
        if outcome not in get_args(Outcome):
            raise ConfigError(f"outcome = {outcome!r}; expected one of {', '.join(get_args(Outcome))}")
        if len(final_observation) != self._n or self.ended:
            raise self._refusal(len(final_observation), self._m)
        final_obs = np.asarray(final_observation, dtype="<f4").tobytes()
        self._ending = Ending(
            discarded=self.samples == 0, samples=self.samples, outcome=outcome, terminated=terminated,
            final_obs=final_obs,
        )  # fmt: skip

    def discard(self) -> None:
        """Throw the episode away; it is not an error if it has ended by a failure of the spool."""
        if not self.ended:
            self._ending = Ending(discarded=True)

    def _refusal(self, n: int, m: int) -> NearhandError:
        if self._failure is not None:
            return self._failure
        if self.ended:
            return ConflictError(f"recording {self.episode} has ended; open a new one", code="conflict.ended")
        return ConfigError(
            f"recording {self.episode}: got {n} observation and {m} action values; the rig has {self._n} and {self._m}",
            code="config.channels",
        )

    def _next_block(self) -> _Block:
        if len(self._blocks) >= self._most_blocks:
            raise StoreError(
                f"recording {self.episode}: {len(self._blocks) * BLOCK_ROWS} samples wait for the spool's disk; "
                "it is too slow for this rate",
                code="store.spool_behind",
            )
        block, self._spare = self._spare or _Block(self._dtype), None
        self._block = block
        self._blocks.append(block)
        return block

    # What follows is for the stream's own thread.

    def fail(self, error: NearhandError) -> None:
        """Take no more samples because of an error."""
        self._failure = error

    def abandon(self) -> None:
        """Take no more samples; the episode is cut."""
        self._abandoned = True

    def taken_over(self) -> tuple[list[Rows], Ending | None, bool]:
        """Return samples not yet taken, how the episode ended, and whether it was abandoned."""
        ending, abandoned = self._ending, self._abandoned
        if self._spare is None and len(self._blocks) == 1 and self._block.filled > BLOCK_ROWS // 2:
            spare = _Block(self._dtype)
            spare.touch()
            self._spare = spare
        parts = []
        while True:
            block = self._blocks[0]
            filled = block.filled
            if filled > block.taken:
                parts.append(block.rows[block.taken : filled])
                block.taken = filled
            if filled < BLOCK_ROWS or len(self._blocks) == 1:
                return parts, ending, abandoned
            self._blocks.popleft()
