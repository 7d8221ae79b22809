"""Compiled inner loops of the channel: finite-volume advection and the spectral inversion.

Discretisation
--------------
Cell averages are advected in flux form. The value on a face comes from the fifth-order
upwind-biased polynomial reconstruction along the face's own axis, written as a sixth-order
centred value minus a dissipative part in proportion to ``|u|``::

    c_face = [37 (c0 + c1) - 8 (c-1 + c2) + (c-2 + c3)] / 60
             - sign(u) [10 (c1 - c0) - 5 (c2 - c-1) + (c3 - c-2)] / 60

(linear part of Shu 1998, NASA/CR-97-206253; Wicker and Skamarock 2002, Mon. Weather Rev.
130, 2088-2097, eq. 4; both from memory). Time stepping is third-order Adams-Bashforth
(Durran 1991, Mon. Weather Rev. 119, 702-720; from memory): stable for centred waves up to
0.72, which with the reconstruction's largest modified wavenumber of 1.59 per cell bounds
``(|u| + |v|) dt / dx`` by 0.45.

The streamfunction stands at cell corners: ``u = -d psi / dy`` on the east and west faces
and ``v = d psi / dx`` on the north and south faces, so that the four face fluxes of any
cell cancel identically.

Single precision throughout: the finite checks stand outside, in ordinary NumPy, so that
the compiler may reorder sums here.
"""

from __future__ import annotations

import numpy as np
import numpy.typing as npt

from learnclosure.compiled import compiled, part_of_kernel

Field = npt.NDArray[np.float32]
Spectrum = npt.NDArray[np.complex64]

HALO = 3
"""Cells of margin on each side that the reconstruction needs."""


@compiled(reorder=True)
def invert_spectrum(spectrum: Spectrum, ridge: Spectrum, inverse: Field, shift: Spectrum) -> None:
    """Turn the spectrum of potential vorticity into that of the streamfunction, in place.

    Parameters
    ----------
    spectrum : ndarray of complex64, shape (member, 2, y, x / 2 + 1), s-1 in, m2 s-1 out
    ridge : ndarray of complex64, shape (y, x / 2 + 1), s-1
        Spectrum of the lower layer's topographic potential vorticity.
    inverse : ndarray of float32, shape (2, 2, y, x / 2 + 1), m2
        Inverse of the two-layer operator for each wavenumber.
    shift : ndarray of complex64, shape (y, x / 2 + 1)
        Phase factors that move values from cell centres to the north-east corners.
    """
    members, _, rows, columns = spectrum.shape
    for member in range(members):
        for row in range(rows):
            for column in range(columns):
                upper = spectrum[member, 0, row, column]
                lower = spectrum[member, 1, row, column] - ridge[row, column]
                phase = shift[row, column]
                spectrum[member, 0, row, column] = phase * (
                    inverse[0, 0, row, column] * upper + inverse[0, 1, row, column] * lower
                )
                spectrum[member, 1, row, column] = phase * (
                    inverse[1, 0, row, column] * upper + inverse[1, 1, row, column] * lower
                )


@part_of_kernel(reorder=True)
def face_velocities(
    corner: Field, spacing: float, background: float, scale: float, west: Field, south: Field
) -> None:
    """Compute the velocities normal to the faces from the corner streamfunction.

    Parameters
    ----------
    corner : ndarray of float32, shape (y, x), m2 s-1
        Streamfunction at the north-east corner of each cell.
    spacing : float, m
        Cell width.
    background : float, m s-1
        Uniform velocity along x to be added.
    scale : float, s m-1
        Factor on every velocity.
    west : ndarray of float32, shape (y, x + 6)
        Receives the scaled velocity on west faces, with the last east face behind them;
        the rest of the margin is left alone.
    south : ndarray of float32, shape (y + 1, x + 6)
        Receives that on south faces, the last north faces in the last row.
    """
    rows, columns = corner.shape
    drift = np.float32(scale * background)
    factor = np.float32(scale / spacing)
    for row in range(rows):
        here = corner[row]
        below = corner[row - 1 if row > 0 else rows - 1]
        faces = west[row, HALO + 1 : HALO + 1 + columns]
        for column in range(columns):
            faces[column] = drift - factor * (here[column] - below[column])
        west[row, HALO] = faces[columns - 1]
        faces = south[row + 1, HALO : HALO + columns]
        faces[0] = factor * (here[0] - here[columns - 1])
        behind, ahead, rest = here[: columns - 1], here[1:], faces[1:]
        for column in range(columns - 1):
            rest[column] = factor * (ahead[column] - behind[column])
    south[0, HALO : HALO + columns] = south[rows, HALO : HALO + columns]


@part_of_kernel(reorder=True)
def _wrap(padded: Field) -> None:
    """Fill the margin of a doubly periodic field."""
    rows, columns = padded.shape[0] - 2 * HALO, padded.shape[1] - 2 * HALO
    for row in range(HALO, HALO + rows):
        for column in range(HALO):
            padded[row, column] = padded[row, columns + column]
            padded[row, HALO + columns + column] = padded[row, HALO + column]
    for row in range(HALO):
        padded[row] = padded[rows + row]
        padded[HALO + rows + row] = padded[HALO + row]


@part_of_kernel(reorder=True)
def _flux(velocity: Field, a: Field, b: Field, c: Field, d: Field, e: Field, f: Field,
          out: Field) -> None:  # fmt: skip
    """Compute 60 times the upwind flux through the faces between cells ``c`` and ``d``."""
    for face in range(out.size):
        speed = velocity[face]
        centred = (
            np.float32(37.0) * (c[face] + d[face])
            - np.float32(8.0) * (b[face] + e[face])
            + (a[face] + f[face])
        )
        rough = (
            np.float32(10.0) * (d[face] - c[face])
            - np.float32(5.0) * (e[face] - b[face])
            + (f[face] - a[face])
        )
        out[face] = speed * centred - abs(speed) * rough


@part_of_kernel(reorder=True)
def _increment(
    west: Field, east: Field, south: Field, north: Field, source: Field, decay: float,
    field: Field, out: Field,
) -> None:  # fmt: skip
    """Sum fluxes, source and decay."""
    loss = np.float32(decay)
    for cell in range(out.size):
        out[cell] = (
            (west[cell] - east[cell]) + (south[cell] - north[cell])
            + (source[cell] - loss * field[cell])
        )  # fmt: skip


@part_of_kernel(reorder=True)
def _extrapolate(field: Field, now: Field, newer: Field, older: Field, weights: Field) -> None:
    """Add the Adams-Bashforth sum of increments and keep this one for later."""
    first, second, third = weights[0], weights[1], weights[2]
    for cell in range(field.size):
        increment = now[cell]
        field[cell] += first * increment + second * newer[cell] + third * older[cell]
        older[cell] = increment


@part_of_kernel(reorder=True)
def advance_field(
    padded: Field, newer: Field, older: Field, source: Field, decay: float,
    west: Field, south: Field, weights: Field, work: Field,
) -> None:  # fmt: skip
    """Advance one field of one layer by one step, in place.

    All arrays share the row length of the padded field, so that each loop runs once over
    the whole layer as one long line; what this puts into the margin is never read.

    Parameters
    ----------
    padded : ndarray of float32, shape (y + 6, x + 6)
        Cell averages inside a margin of ``HALO`` cells; overwritten by the next step's.
    newer, older : ndarray of float32, shape (y, x + 6)
        Increments of the last step and the one before; ``older`` is overwritten by the
        increment of this step.
    source : ndarray of float32, shape (y, x + 6)
        Increment by sources in one step.
    decay : float
        Share of the field that decays in one step.
    west, south : ndarray of float32, shape (y, x + 6) and (y + 1, x + 6)
        Courant numbers over 60 on the faces, from `face_velocities`.
    weights : ndarray of float32, shape (3,)
        Adams-Bashforth weights of this, the last and the older increment.
    work : ndarray of float32, shape (3, (y + 1) * (x + 6))
        Work space.
    """
    _wrap(padded)
    stride = padded.shape[1]
    cells = newer.size
    faces = cells + stride
    inner = cells - 1
    first = HALO * stride
    line = padded.reshape(padded.size)
    across, along, now = work[0, :cells], work[1, :faces], work[2, :inner]
    _flux(
        west.reshape(cells), line[first - 3 : first - 3 + cells],
        line[first - 2 : first - 2 + cells], line[first - 1 : first - 1 + cells],
        line[first : first + cells], line[first + 1 : first + 1 + cells],
        line[first + 2 : first + 2 + cells], across,
    )  # fmt: skip
    _flux(
        south.reshape(faces), line[:faces], line[stride : stride + faces],
        line[2 * stride : 2 * stride + faces], line[first : first + faces],
        line[first + stride : first + stride + faces],
        line[first + 2 * stride : first + 2 * stride + faces], along,
    )  # fmt: skip
    body = line[first : first + inner]
    _increment(
        across[:inner], across[1:], along[:inner], along[stride : stride + inner],
        source.reshape(cells)[:inner], decay, body, now,
    )  # fmt: skip
    _extrapolate(body, now, newer.reshape(cells)[:inner], older.reshape(cells)[:inner], weights)


@part_of_kernel(reorder=True)
def _gather(total: Field, part: Field) -> None:
    """Add to a running sum."""
    for cell in range(total.size):
        total[cell] += part[cell]


@part_of_kernel(reorder=True)
def _separation(corner: Field, out: Field, mean: Field) -> None:
    """Average the upper minus the lower streamfunction to cell centres, and along x."""
    _, rows, columns = corner.shape
    for row in range(rows):
        south = row - 1 if row > 0 else rows - 1
        total = np.float64(0.0)
        before = (corner[0, south, columns - 1] - corner[1, south, columns - 1]) + (
            corner[0, row, columns - 1] - corner[1, row, columns - 1]
        )
        for column in range(columns):
            here = (corner[0, south, column] - corner[1, south, column]) + (
                corner[0, row, column] - corner[1, row, column]
            )
            out[row, column] = np.float32(0.25) * (before + here)
            total += out[row, column]
            before = here
        mean[row] = total / columns


@part_of_kernel(reorder=True)
def vorticity_source(
    layer: int, vorticity: Field, ridge: Field, separation: Field, mean: Field, target: Field,
    south: Field, coefficients: Field, out: Field,
) -> None:  # fmt: skip
    """Compute the sources of potential vorticity of one layer in one step.

    Background gradient, relaxation of the zonal-mean interface and, in the lower layer,
    bottom drag on ``zeta = q - ridge - F (psi1 - psi2)``.

    Parameters
    ----------
    layer : int
        0 for the upper, 1 for the lower layer.
    vorticity : ndarray of float32, shape (y + 6, x + 6), s-1
        Potential vorticity without its background gradient, inside its margin.
    ridge : ndarray of float32, shape (y, x), s-1
        The ridge's part of the lower layer's.
    separation : ndarray of float32, shape (y, x), m2 s-1
        Upper minus lower streamfunction at cell centres.
    mean, target : ndarray of float32, shape (y,), m2 s-1
        Its mean along x and what that is drawn to.
    south : ndarray of float32, shape (y + 1, x + 6)
        Courant numbers over 60 on south faces.
    coefficients : ndarray of float32, shape (4,)
        Background gradient times 30 spacings, m-1 s-1 m; stretching times the share of the
        separation relaxed in a step, with the layer's sign, m-2; share of vorticity lost
        to drag in a step; stretching, m-2.
    out : ndarray of float32, shape (y, x + 6), s-1
        Receives the increment; its margin is left alone.
    """
    rows, columns = ridge.shape
    gradient, draw, drag, stretching = coefficients
    inner = slice(HALO, HALO + columns)
    for row in range(rows):
        pull = draw * (mean[row] - target[row])
        below, above, increment = south[row, inner], south[row + 1, inner], out[row, inner]
        for column in range(columns):
            increment[column] = pull - gradient * (below[column] + above[column])
        if layer == 1:
            total, fixed, apart = vorticity[row + HALO, inner], ridge[row], separation[row]
            for column in range(columns):
                increment[column] -= drag * (
                    (total[column] - fixed[column]) - stretching * apart[column]
                )


@compiled(reorder=True)
def advance_members(
    corner: Field, vorticity: Field, vorticity_newer: Field, vorticity_older: Field,
    tracers: Field, tracers_newer: Field, tracers_older: Field, tracer_source: Field,
    ridge: Field, target: Field, coefficients: Field, background: Field, spacing: float,
    courant: float, decay: float, vorticity_weights: Field, tracer_weights: Field,
    content: Field, flux_x: Field, flux_y: Field,
) -> None:  # fmt: skip
    """Advance potential vorticity and tracers of all members by one step, in place.

    Parameters
    ----------
    corner : ndarray of float32, shape (member, 2, y, x), m2 s-1
        Streamfunction at north-east corners.
    vorticity : ndarray of float32, shape (member, 2, y + 6, x + 6), s-1
        Potential vorticity without its background gradient, inside its margin.
    vorticity_newer, vorticity_older : ndarray of float32, shape (member, 2, y, x + 6), s-1
        Its last two increments.
    tracers : ndarray of float32, shape (member, 2, tracer, y + 6, x + 6)
        There may be none.
    tracers_newer, tracers_older : ndarray of float32, shape (member, 2, tracer, y, x + 6)
        Their last two increments.
    tracer_source : ndarray of float32, shape (tracer, y, x + 6)
        Increment of each tracer by its target in one step.
    ridge : ndarray of float32, shape (y, x), s-1
    target : ndarray of float32, shape (y,), m2 s-1
    coefficients : ndarray of float32, shape (2, 4)
        See `vorticity_source`.
    background : ndarray of float32, shape (2,), m s-1
        Uniform velocity along x in each layer.
    spacing : float, m
        Cell width.
    courant : float, s m-1
        Time step over 60 spacings.
    decay : float
        Share of a tracer that decays in one step.
    vorticity_weights, tracer_weights : ndarray of float32, shape (3,)
        Adams-Bashforth weights.
    content, flux_x : ndarray of float32, shape (member, 2, tracer, y, x + 6)
        Receive, added to what is there, each tracer as it stood before the step and what
        passed the west faces in it, in cell contents; they may hold no tracer.
    flux_y : ndarray of float32, shape (member, 2, tracer, y + 1, x + 6)
        The same for what passed the south faces.
    """
    members, layers, rows, columns = corner.shape
    stride = columns + 2 * HALO
    west = np.zeros((rows, stride), np.float32)
    south = np.zeros((rows + 1, stride), np.float32)
    forcing = np.zeros((rows, stride), np.float32)
    work = np.zeros((3, (rows + 1) * stride), np.float32)
    separation = np.empty((rows, columns), np.float32)
    mean = np.empty(rows, np.float32)
    for member in range(members):
        _separation(corner[member], separation, mean)
        for layer in range(layers):
            face_velocities(corner[member, layer], spacing, background[layer], courant, west, south)
            vorticity_source(
                layer, vorticity[member, layer], ridge, separation, mean, target, south,
                coefficients[layer], forcing,
            )  # fmt: skip
            # One call for vorticity and tracers alike: it is taken in, and compiled, once.
            padded, rate, weights = vorticity[member, layer], 0.0, vorticity_weights
            source = forcing
            newer, older = vorticity_newer[member, layer], vorticity_older[member, layer]
            for number in range(tracers.shape[2] + 1):
                gathers = 0 < number <= content.shape[2]
                if gathers:
                    first = HALO * stride
                    line = padded.reshape(padded.size)[first : first + rows * stride]
                    total = content[member, layer, number - 1]
                    _gather(total.reshape(total.size), line)
                advance_field(padded, newer, older, source, rate, west, south, weights, work)
                if gathers:
                    total = flux_x[member, layer, number - 1]
                    _gather(total.reshape(total.size), work[0])
                    total = flux_y[member, layer, number - 1]
                    _gather(total.reshape(total.size), work[1])
                if number < tracers.shape[2]:
                    padded, rate, weights = tracers[member, layer, number], decay, tracer_weights
                    newer = tracers_newer[member, layer, number]
                    older = tracers_older[member, layer, number]
                    source = tracer_source[number]
