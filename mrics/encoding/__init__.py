"""The encoding room: the forward model of the scan, its noise and channels, simulation."""

from __future__ import annotations

from importlib import import_module
from typing import TYPE_CHECKING, Any

if TYPE_CHECKING:
    from mrics.encoding.acquisition import Acquisition as Acquisition
    from mrics.encoding.channels import combine_channels as combine_channels
    from mrics.encoding.channels import compress as compress
    from mrics.encoding.channels import root_sum_of_squares as root_sum_of_squares
    from mrics.encoding.channels import singular_values as singular_values
    from mrics.encoding.coils import Coils as Coils
    from mrics.encoding.coils import coils_for_scan as coils_for_scan
    from mrics.encoding.coils import simulate_coils as simulate_coils
    from mrics.encoding.echoes import echo_weights as echo_weights
    from mrics.encoding.lattice import Lattice as Lattice
    from mrics.encoding.lattice import find_lattice as find_lattice
    from mrics.encoding.measured import acquisition_from_kspace as acquisition_from_kspace
    from mrics.encoding.noise import border_covariance as border_covariance
    from mrics.encoding.noise import estimate_sigma as estimate_sigma
    from mrics.encoding.noise import noise_covariance as noise_covariance
    from mrics.encoding.noise import whitening as whitening
    from mrics.encoding.operator import Encoding as Encoding
    from mrics.encoding.sensitivities import estimate_sensitivities as estimate_sensitivities
    from mrics.encoding.sensitivities import with_sensitivities as with_sensitivities
    from mrics.encoding.simulate import undersample as undersample
    from mrics.encoding.stream import blocks as blocks
    from mrics.encoding.subset import frames_of as frames_of
    from mrics.encoding.subset import some_planes as some_planes

_HOMES = {
    "Acquisition": "acquisition",
    "Coils": "coils",
    "Encoding": "operator",
    "Lattice": "lattice",
    "acquisition_from_kspace": "measured",
    "blocks": "stream",
    "border_covariance": "noise",
    "coils_for_scan": "coils",
    "combine_channels": "channels",
    "compress": "channels",
    "echo_weights": "echoes",
    "estimate_sensitivities": "sensitivities",
    "estimate_sigma": "noise",
    "find_lattice": "lattice",
    "frames_of": "subset",
    "noise_covariance": "noise",
    "root_sum_of_squares": "channels",
    "simulate_coils": "coils",
    "singular_values": "channels",
    "some_planes": "subset",
    "undersample": "simulate",
    "whitening": "noise",
    "with_sensitivities": "sensitivities",
}

__all__ = [
    "Acquisition",
    "Coils",
    "Encoding",
    "Lattice",
    "acquisition_from_kspace",
    "blocks",
    "border_covariance",
    "coils_for_scan",
    "combine_channels",
    "compress",
    "echo_weights",
    "estimate_sensitivities",
    "estimate_sigma",
    "find_lattice",
    "frames_of",
    "noise_covariance",
    "root_sum_of_squares",
    "simulate_coils",
    "singular_values",
    "some_planes",
    "undersample",
    "whitening",
    "with_sensitivities",
]


def __getattr__(name: str) -> Any:
    if name in _HOMES:
        return getattr(import_module(f"mrics.encoding.{_HOMES[name]}"), name)
    raise AttributeError(f"module 'mrics.encoding' has no attribute {name!r}")
