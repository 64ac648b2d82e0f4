"""A scene seen through a camera: a stack of known noise around a known signal, made plane by plane."""

from __future__ import annotations

from collections import deque
from collections.abc import Iterator
from concurrent.futures import ThreadPoolExecutor
from dataclasses import dataclass
from functools import cached_property
from typing import Any, Protocol

import numpy as np
from numpy.typing import NDArray

from stackbound_synthetic.camera import Camera
from stackbound_synthetic.seeds import generator

EXPOSURE = 7
"""Purpose of the random numbers (see `generator`) of the noise."""


class Scene(Protocol):
    """What a camera can look at."""

    @property
    def size(self) -> tuple[int, int]:
        """Rows and columns."""
        ...

    @property
    def channel_names(self) -> tuple[str, ...]:
        """One name per channel."""
        ...

    @property
    def pixel(self) -> tuple[float, float, float]:
        """Distance between pixels along z, y and x, in micrometres."""
        ...

    def plane(self, channel: int, z: int) -> NDArray[np.float32]:
        """Return the expected electrons of one plane, without the camera's leakage."""
        ...


@dataclass(frozen=True)
class SyntheticStack:
    """Planes of a scene as a camera records them; any plane can be asked for at any time.

    Attributes
    ----------
    scene : Scene
        What is there.
    camera : Camera
        How it is recorded.
    depth : int
        Planes along z.
    seed : int
        Of the noise; the scene has its own.
    name : str
        Goes into the metadata of files.
    """

    scene: Scene
    camera: Camera
    depth: int
    seed: int
    name: str = "synthetic stack"

    @property
    def shape(self) -> tuple[int, int, int, int]:
        """Channels, planes, rows, columns."""
        return (len(self.scene.channel_names), self.depth, *self.scene.size)

    @property
    def dtype(self) -> np.dtype[Any]:
        """Pixel type of the camera."""
        return self.camera.dtype

    @cached_property
    def _leakage(self) -> NDArray[np.float32]:
        return self.camera.leakage(self.scene.size, self.seed)

    def electrons(self, channel: int, z: int) -> NDArray[np.float32]:
        """Return the expected electrons of one plane, leakage of hot pixels included."""
        return self.scene.plane(channel, z) + self._leakage

    def signal(self, channel: int, z: int) -> NDArray[np.float32]:
        """Return the noiseless grey levels of one plane, before rounding and saturation."""
        return self.camera.expected(self.electrons(channel, z))

    def plane(self, channel: int, z: int) -> NDArray[Any]:
        """Return the recorded grey levels of one plane."""
        return self.camera.expose(self.electrons(channel, z), generator(self.seed, EXPOSURE, channel, z))

    def planes(self, workers: int = 2) -> Iterator[NDArray[Any]]:
        """Yield all recorded planes, channel by channel; at most ``workers + 1`` of them are in memory."""
        places = [(channel, z) for channel in range(self.shape[0]) for z in range(self.depth)]
        with ThreadPoolExecutor(workers) as pool:
            ahead = deque(pool.submit(self.plane, *place) for place in places[:workers])
            for place in places[workers:]:
                plane = ahead.popleft().result()
                ahead.append(pool.submit(self.plane, *place))
                yield plane
            while ahead:
                yield ahead.popleft().result()

    def pixels(self) -> NDArray[Any]:
        """Return the whole stack, shape (c, z, y, x)."""
        return np.stack(list(self.planes())).reshape(self.shape)
