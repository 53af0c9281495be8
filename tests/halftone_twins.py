"""Slow twins of the other halftones: white noise, error diffusion, dithered interfaces."""

import math

import numpy as np
from print_twins import NumpySlicer

_WORD = (1 << 64) - 1


def mixed(value):
    """The finaliser of splitmix64 in whole numbers (Steele, Lea & Flood 2014)."""
    value = (value ^ (value >> 30)) * 0xBF58476D1CE4E5B9 & _WORD
    value = (value ^ (value >> 27)) * 0x94D049BB133111EB & _WORD
    return value ^ (value >> 31)


def site_word(layer, row, column, key):
    """The random word of a site."""
    counter = layer << 42 | row << 21 | column
    return mixed((counter * 0x9E3779B97F4A7C15 + key) & _WORD)


def unit(word):
    """A word as a number in (0, 1)."""
    return np.float32(((word >> 41) + 0.5) / (1 << 23))


def noise_key(seed):
    """The key that a seed stands for."""
    random = np.random.Generator(np.random.Philox(key=[seed, 1]))
    return int(random.integers(0, 2**64, dtype=np.uint64))


class HashSlicer(NumpySlicer):
    """White noise for thresholds."""

    def __init__(self, part, raster, resins, *, support, seed):
        super().__init__(part, raster, resins, support=support, seed=seed)
        self.key = noise_key(seed)
        self.offset = raster.image_offset

    def threshold(self, layer):
        z, y, x = self.offset
        rows, columns = self.raster.image_shape[1:]
        return np.array(
            [
                [unit(site_word(z + layer, y + j, x + i, self.key)) for i in range(columns)]
                for j in range(rows)
            ]
        )


class DiffusionSlicer(HashSlicer):
    """Error diffusion over all resins at once, site by site; layers in order from the first."""

    WITHIN = (7 / 16, 3 / 16, 5 / 16, 1 / 16)  # K1: Floyd & Steinberg 1976

    def __init__(self, part, raster, resins, *, support, seed):
        super().__init__(part, raster, resins, support=support, seed=seed)
        rows, columns = raster.image_shape[1:]
        self.carry = np.zeros((rows, columns, len(resins)), np.float32)
        self.dithered = np.zeros((rows, columns), bool)

    def fractions(self, layer):
        """Fractions of every resin, float32 [rows, columns, resins], in the order of laying."""
        last = np.ones(self.raster.image_shape[1:], np.float32)
        total = np.stack([*self.cumulative(layer), last], axis=-1)
        out = total.copy()
        out[..., 1:] -= total[..., :-1]
        return out

    def chosen(self, layer, inside):
        f32 = np.float32
        rows, columns, n = self.carry.shape
        fraction = self.fractions(layer)
        carry, below = self.carry, self.dithered
        z, y0, x0 = (o + s for o, s in zip(self.offset, (layer, 0, 0), strict=True))
        self.carry = np.zeros_like(carry)
        self.dithered = inside & ((fraction > f32(1e-6)).sum(axis=2) > 1)
        owed = np.zeros_like(carry)
        out = np.zeros((rows, columns), np.uint8)
        turn = 1 if z % 2 == 0 else -1
        for y in range(rows)[::turn]:
            step = 1 if (z // 2 + y0 + y) % 2 == 0 else -1
            for x in range(columns)[::step]:
                if not inside[y, x]:
                    continue
                f = fraction[y, x]
                if not self.dithered[y, x]:
                    out[y, x] = self.numbers[int(np.argmax(f))]
                    continue
                blend = [q for q in range(n) if f[q] > f32(1e-6)]
                value = owed[y, x] + carry[y, x]
                share = f32(1) / f32(len(blend))
                stray = f32(0)
                for q in range(n):
                    if q not in blend:
                        stray += value[q]
                        value[q] = 0
                stray *= share
                first = f32(0.0 if below[y, x] else 0.21)
                word = site_word(z, y0 + y, x0 + x, self.key)
                noisy = {}
                for q in blend:
                    value[q] += f[q] + stray + first * (share - f[q])
                    noise = unit(mixed((word + q) & _WORD)) - f32(0.5)
                    noisy[q] = value[q] + f32(0.5) * noise
                best = max(blend, key=lambda q: noisy[q])
                out[y, x] = self.numbers[best]
                value[best] -= f32(1)
                self.spread(owed, y, x, step, turn, value)
        return out

    def open(self, y, x):
        """Whether a site can take what is passed on."""
        rows, columns = self.dithered.shape
        return 0 <= y < rows and 0 <= x < columns and self.dithered[y, x]

    def spread(self, owed, y, x, step, turn, e):
        """Pass what stays owed on: 60 % within the layer, 40 % up; a closed site's share up."""
        given = []
        places = [(0, step), (turn, -step), (turn, 0), (turn, step)]
        for field, near, weights in (
            (owed, places, [np.float32(0.6 * w) for w in self.WITHIN]),
            (self.carry, [(-turn, 0), (turn, 0), (0, -1), (0, 1)], [np.float32(0.06)] * 4),
        ):
            total = np.float32(0)
            for (dy, dx), w in zip(near, weights, strict=True):
                if self.open(y + dy, x + dx):
                    field[y + dy, x + dx] += e * w
                    total += w
            given.append(total)
        self.carry[y, x] += e * (np.float32(1) - given[0] - given[1])


class RampSlicer(NumpySlicer):
    """Two resins, hard and soft, dithered into each other over a width."""

    def __init__(self, part, raster, resins, width, *, support, seed):
        super().__init__(part, raster, resins, support=support, seed=seed)
        spacing = [part.grid.spacing[a] for a, _ in raster.part_axes()]
        keep = width / 2 + np.linalg.norm(spacing)
        raw = raster.to_image(part.labels)
        place = interface_place(raw, self.labels, (1, 2), width, spacing, keep)
        self.place = place.astype(np.float32)

    def chosen(self, layer, inside):
        site = super().chosen(layer, inside)
        low, high, w = (v[layer] for v in self.axes[0])
        a, b = self.place[low], self.place[high]
        known = np.isfinite(a) & np.isfinite(b)
        cell = known[:-1, :-1] & known[1:, :-1] & known[:-1, 1:] & known[1:, 1:]
        cell = cell[np.ix_(self.axes[1][0], self.axes[2][0])]
        first = np.float32(0.5) + self.along_plane(a + w * (b - a), False)
        pair = np.where(self.threshold(layer) < first, self.numbers[0], self.numbers[1])
        return np.where(cell, pair, site).astype(np.uint8)


def interface_place(labels, zone_of, ends, width, spacing, keep):
    """Distance of each voxel from the interface of two zones over its width; NaN beyond `keep`.

    By brute force over all pairs of voxels, labels ``[l, r, c]`` with those beyond the part
    already carried on in `zone_of`; `ends` are the two zones, the first positive.
    """
    out = np.full(labels.shape, np.nan)
    for own, other, sign in ((*ends, 1), (*ends[::-1], -1)):
        beside = [
            u
            for u in np.ndindex(labels.shape)
            if labels[u] == other and any(labels[v] == own for v in neighbours(u, labels.shape))
        ]
        for v in np.ndindex(labels.shape):
            if zone_of[v] != own or not beside:
                continue
            d = min(
                math.hypot(
                    *(max(abs(a - b) - 0.5, 0.0) * h for a, b, h in zip(u, v, spacing, strict=True))
                )
                for u in beside
            )
            if d <= keep:
                out[v] = sign * d / width
    return out


def neighbours(v, shape):
    """The voxels that share a face with `v`."""
    for axis in range(3):
        for step in (-1, 1):
            u = (*v[:axis], v[axis] + step, *v[axis + 1 :])
            if 0 <= u[axis] < shape[axis]:
                yield u
