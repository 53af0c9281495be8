"""What happened to files that are not those that were written: swapped, mirrored, cut off."""

from __future__ import annotations

import hashlib

import numpy as np

from voxelmat.errors import FileFormatError
from voxelmat.printing.imagefiles import ImageFiles
from voxelmat.printing.readback import Stack

__all__ = ["what_happened"]


def what_happened(stack: Stack, channel: int, layer: int) -> str:
    """Say what one changed file is, found by its SHA-256.

    Parameters
    ----------
    stack : Stack
    channel, layer : int

    Returns
    -------
    str
        Words such as ``"it is the image of layer 8"``; empty where nothing known fits.
    """
    try:
        data = stack.files.file_bytes(channel, layer)
    except FileFormatError:
        return "it is missing"
    digest = hashlib.sha256(data).hexdigest()
    for number, other in enumerate(stack.channels):
        if digest in other.sha256:
            at = other.sha256.index(digest)
            if number == channel:
                return f"it is the image of layer {at}"
            return f"it is the image of channel '{other.name}', layer {at}"
    try:
        stack.files.decode(channel, layer, data)
    except FileFormatError:
        return "it is cut off or damaged"
    return "" if stack.is_indexed else _turned(stack, channel, layer)


def _turned(stack: Stack, channel: int, layer: int) -> str:
    """Whether turning the image back gives the file that was written, byte for byte."""
    read = stack.files.examine(layer)
    width = stack.raster.image_shape[2]
    plane = np.unpackbits(read.bits[channel], axis=1, count=width)
    images = ImageFiles(stack.raster, [c.name for c in stack.channels], stack.profile)
    if images.kind != "png bitmap":
        return ""
    for words, back in (
        ("it is mirrored along its columns", plane[:, ::-1]),
        ("it is mirrored along its rows", plane[::-1]),
        ("it is turned by 180 degrees", plane[::-1, ::-1]),
        ("its polarity is inverted", 1 - plane),
        ("it is shifted by one column", np.roll(plane, -1, axis=1)),
        ("it is shifted by one column", np.roll(plane, 1, axis=1)),
        ("it is shifted by one row", np.roll(plane, -1, axis=0)),
        ("it is shifted by one row", np.roll(plane, 1, axis=0)),
    ):
        read.bits[channel] = np.packbits(back, axis=1)
        data = list(images.encode(read.bits))[channel]
        if hashlib.sha256(data).hexdigest() == stack.channels[channel].sha256[layer]:
            return words
    return ""
