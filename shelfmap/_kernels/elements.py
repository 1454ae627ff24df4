"""Loops over the pixels of a field: which nodes meet, and the matrix of one wave.

A pixel has four corners in the order south-west, south-east, north-east, north-west. Nothing is checked.
"""

import numpy as np
from numba import njit


@njit(cache=True)
def meetings(corner, indptr, indices):
    """Fill in the pattern of a matrix in which the corners of a pixel meet; return how many entries it has.

    Parameters
    ----------
    corner : (n, 4) array of int32
        Nodes at the corners of each pixel.
    indptr : (n_nodes + 1,) array of int32
        Filled in: where each column begins.
    indices : (at least 9 n_nodes,) array of int32
        Filled in: rows of the entries of each column, rising.
    """
    n_nodes = indptr.shape[0] - 1
    n_pixels = np.zeros(n_nodes, np.int8)
    pixels = np.empty((n_nodes, 4), np.int32)
    for e in range(corner.shape[0]):
        for a in range(4):
            node = corner[e, a]
            pixels[node, n_pixels[node]] = e
            n_pixels[node] += 1
    end = 0
    indptr[0] = 0
    for node in range(n_nodes):
        begin = end
        for i in range(n_pixels[node]):
            for a in range(4):
                other = corner[pixels[node, i], a]
                place = end
                while place > begin and indices[place - 1] > other:
                    place -= 1
                if place > begin and indices[place - 1] == other:
                    continue
                for j in range(end, place, -1):
                    indices[j] = indices[j - 1]
                indices[place] = other
                end += 1
        indptr[node + 1] = end
    return end


@njit(cache=True)
def add_pixels(corner, mass, along, across, twist, metric, indptr, indices, data):
    """Add the share of every pixel to a matrix.

    Parameters
    ----------
    corner : (n, 4) array of int32
        Nodes at the corners of each pixel.
    mass, along, across, twist : (n,) array of complex128
        What multiplies, for each pixel: the product of elevations over its area; that of gradients at its centre; that
        of a gradient and the other one turned by a right angle; that of the pattern + - + -, which has no gradient
        there.
    metric : (n, 3) array of float64
        What makes gradients per pixel gradients per metre: G, -F and E over the area, with E, F, G the products of
        the vectors along the pixel's south and west side.
    indptr, indices : arrays of int32
        Pattern, from `meetings`.
    data : array of complex128
        Entries, added to.
    """
    # elevations: halfway between lumped and linear along either axis, which is exact to fourth order along both
    near, far = 5.0 / 12.0, 1.0 / 12.0
    share = np.empty((4, 4))
    east = np.array([-0.5, 0.5, 0.5, -0.5])
    north = np.array([-0.5, -0.5, 0.5, 0.5])
    sign = np.array([1.0, -1.0, 1.0, -1.0])
    for a in range(4):
        for b in range(4):
            share[a, b] = (near if east[a] == east[b] else far) * (near if north[a] == north[b] else far)
    for e in range(corner.shape[0]):
        for b in range(4):
            column = corner[e, b]
            for a in range(4):
                row = corner[e, a]
                place = indptr[column]
                while indices[place] != row:
                    place += 1
                gradients = (
                    metric[e, 0] * east[a] * east[b]
                    + metric[e, 1] * (east[a] * north[b] + north[a] * east[b])
                    + metric[e, 2] * north[a] * north[b]
                )
                turned = east[a] * north[b] - north[a] * east[b]
                data[place] += (
                    mass[e] * share[a, b] + along[e] * gradients + across[e] * turned + twist[e] * sign[a] * sign[b]
                )


@njit(cache=True)
def add_sides(ends, weight, indptr, indices, data):
    """Add the share of open sides that let waves out to a matrix.

    Parameters
    ----------
    ends : (m, 2) array of int32
        Nodes at the ends of each side.
    weight : (m,) array of complex128
        What multiplies the product of elevations along the side.
    indptr, indices, data
        As for `add_pixels`.
    """
    for e in range(ends.shape[0]):
        for b in range(2):
            for a in range(2):
                place = indptr[ends[e, b]]
                while indices[place] != ends[e, a]:
                    place += 1
                data[place] += weight[e] * (5.0 / 12.0 if a == b else 1.0 / 12.0)
