"""The one door of randomness: streams of standard normal scores named by seed, stream and block."""

from __future__ import annotations

import zlib

import numpy as np

from withstand.departures.base import NoiseStream
from withstand.study.design import Floats

_STREAM_NUMBER = {stream: number for number, stream in enumerate(NoiseStream)}
_DESIGN_STREAM = 1000
_PROCEDURE_STREAM = 2000


def stream_generator(seed: int, stream: int, block: int) -> np.random.Generator:
    """A generator that depends on the three numbers alone, never on workers or order of completion."""
    return np.random.Generator(np.random.SFC64(np.random.SeedSequence(seed, spawn_key=(stream, block))))


def design_generator(seed: int, block: int) -> np.random.Generator:
    """The generator that draws the design of a block."""
    return stream_generator(seed, _DESIGN_STREAM, block)


class BlockNoise:
    """Noise of one block, shared by every world and procedure.

    Parameters
    ----------
    seed : int
        Seed of the run.
    block : int
        Number of the block.
    width : int
        Replicates B.
    buffers : dict, optional
        Arrays to reuse from block to block.
    """

    def __init__(self, seed: int, block: int, width: int, buffers: dict[str, Floats] | None = None) -> None:
        self.seed = seed
        self.block = block
        self.width = width
        self._buffers = {} if buffers is None else buffers
        self._drawn: dict[NoiseStream, Floats] = {}

    def normal(self, stream: NoiseStream, rows: int) -> Floats:
        """Standard normal scores (rows, B), drawn at the first call for the stream."""
        drawn = self._drawn.get(stream)
        if drawn is None:
            buffer = self._buffers.get(stream)
            if buffer is None or buffer.shape != (rows, self.width):
                buffer = self._buffers[stream] = np.empty((rows, self.width))
            drawn = self._drawn[stream] = self.generator(stream).standard_normal(out=buffer)
        return drawn

    def generator(self, stream: NoiseStream) -> np.random.Generator:
        """A generator at the start of the stream."""
        return stream_generator(self.seed, _STREAM_NUMBER[stream], self.block)

    def procedure_generator(self, name: str) -> np.random.Generator:
        """A generator at the start of a procedure's own stream; the name is hashed, so order of registration is immaterial."""
        return stream_generator(self.seed, _PROCEDURE_STREAM + zlib.crc32(name.encode()), self.block)
