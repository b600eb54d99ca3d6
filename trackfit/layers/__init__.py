"""Layers: gridded variables over the sea and the coast, brought into the plane."""

from trackfit.layers.coast import read_coast
from trackfit.layers.layer import Box, Coast, Layer, LayerRequest
from trackfit.layers.read import read_layer

__all__ = ["Box", "Coast", "Layer", "LayerRequest", "read_coast", "read_layer"]
