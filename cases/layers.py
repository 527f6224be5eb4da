"""The stack of a case from its `[[layer]]` and `[[sheet]]` tables, and what it asks of the conductors."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace

import numpy as np
from numpy.typing import NDArray

from ..geometry.conductor import Conductor, Disc, Plate, Polygon, Strip, Wire
from ..geometry.errors import InputError, nearest
from ..geometry.shapes import region_of, wire_points
from ..geometry.stack import Layer, SheetImpedance, Stack
from .fields import Values, in_words

Floats = NDArray[np.float64]

THICKEST = 10.0  # wavelengths: a layer beyond is taken for a half-space
HAIR = 1e-3  # of the thinnest layer: a conductor this close to an interface was meant to lie on it


def build_stack(layers: Sequence[Values], sheets: Sequence[Values], *, ground: bool, wavelength: float) -> Stack | None:
    """The stack, or None without layers and sheets; `wavelength` in air at the highest frequency, m.

    A sheet given by `on` gets its height written back.

    Raises
    ------
    InputError
        For layers and sheets that make no stack.
    """
    if not layers and not sheets:
        return None
    built: list[Layer] = []
    for number, values in enumerate(layers, start=1):
        where = _place("layer", number, values)
        if values["thickness"] > THICKEST * wavelength:
            raise InputError(
                f"thickness = {in_words(values['thickness'], 'length')} is "
                f"{values['thickness'] / wavelength:.3g} wavelengths at the highest frequency.",
                where=f"{where}, key 'thickness'",
                allowed=f"up to {THICKEST:g} wavelengths, {in_words(THICKEST * wavelength, 'length')}",
                hint="Above the last layer, and below the first without a ground, there is air without end by itself.",
            )
        if values["name"] and values["name"] in [layer.name for layer in built]:
            raise InputError(f"the name '{values['name']}' is used twice.", where=where, allowed="another name")
        built.append(_located(where, Layer, values, "thickness", "permittivity", "loss_tangent", "permeability"))
    stack = Stack(tuple(built), ground)
    return Stack(stack.layers, ground, tuple(_sheet(values, n, stack) for n, values in enumerate(sheets, start=1)))


def _located(where: str, kind: type[Layer], values: Values, *keys: str) -> Layer:
    """The layer, with errors told at the place in the file."""
    try:
        return kind(**{key: values[key] for key in keys}, name=values["name"], artificial=values["artificial"])
    except InputError as fault:
        hint = fault.hint
        if not values["artificial"] and (0 < values["permittivity"] < 1 or 0 < values["permeability"] < 1):
            hint = "Rodded media and plasmas have it below 1: then write artificial = true."
        raise InputError(fault.message, where=where, allowed=fault.allowed, hint=hint) from fault


def _sheet(values: Values, number: int, stack: Stack) -> SheetImpedance:
    where = _place("sheet", number, values)
    if (values["height"] is None) == (values["on"] is None):
        given = "neither height nor on is" if values["on"] is None else "height and on are both"
        raise InputError(f"{given} given.", where=where, allowed="height, or on = the name of a layer")
    if values["on"] is not None:
        names = [layer.name for layer in stack.layers]
        if values["on"] not in names:
            raise InputError(
                f"there is no layer '{values['on']}'.",
                where=f"{where}, key 'on'",
                allowed=", ".join(name for name in names if name) or "no layer has a name",
                hint=nearest(values["on"], names),
            )
        values["height"] = float(stack.interfaces[names.index(values["on"]) + 1])
        values["on"] = None
    impedance = complex(values["resistance"], values["reactance"])
    return SheetImpedance(values["height"], impedance, values["name"])


def conductor_heights(conductor: Conductor) -> Floats:
    """Heights of the corners of a conductor, m; empty for mesh files."""
    if isinstance(conductor, Wire):
        return wire_points(conductor)[:, 2]
    if isinstance(conductor, Strip | Plate | Disc | Polygon):
        return region_of(conductor).corners[:, 2]
    return np.zeros(0)


def check_conductors(conductors: Sequence[Conductor], stack: Stack) -> None:
    """Refuse conductors just off an interface, faces across one, and faces on a sheet."""
    hair = HAIR * min((layer.thickness for layer in stack.layers), default=0.0)
    sheets = [float(stack.snap(sheet.height)) for sheet in stack.sheets]
    for conductor in conductors:
        z, where = conductor_heights(conductor), f"[[conductor]] '{conductor.name}'"
        if not len(z):
            continue
        if stack.ground and z.min() < -1e-9 * max(stack.top, float(np.ptp(z))):
            raise InputError(
                f"it reaches z = {in_words(float(z.min()), 'length')}, inside the ground.",
                where=where,
                allowed="heights of 0 and above: the bottom of the first layer is z = 0",
            )
        off = np.abs(z[:, None] - stack.interfaces)
        close = (off > 0) & (off < hair) & (stack.snap(z)[:, None] != stack.interfaces)
        if close.any():
            i, j = np.argwhere(close)[0]
            raise InputError(
                f"a corner at z = {float(z[i]) * 1e3:.10g} mm lies {in_words(float(off[i, j]), 'length')} off the "
                f"interface at {in_words(float(stack.interfaces[j]), 'length')}.",
                where=where,
                allowed=f"on the interface, or at least {in_words(hair, 'length')} off it",
                hint="Heights are best given by the same parameters as the thicknesses.",
            )
        if not isinstance(conductor, Wire):
            _check_face(z, stack, sheets, where)


def _check_face(z: Floats, stack: Stack, sheets: list[float], where: str) -> None:
    low, high = float(stack.snap(z.min())), float(stack.snap(z.max()))
    if low == high and low in sheets:
        raise InputError(
            f"it lies on the sheet at z = {in_words(low, 'length')}, and would short it.",
            where=where,
            allowed="another height",
        )
    inside = [b for b in (*stack.interfaces, *sheets) if low < b < high]
    if inside:
        raise InputError(
            f"its face reaches from z = {in_words(low, 'length')} to {in_words(high, 'length')}, across the interface "
            f"or sheet at {in_words(float(inside[0]), 'length')}.",
            where=where,
            allowed="faces within one layer",
            hint="Split it there into two that touch; wires may cross.",
        )


def sized(conductors: Sequence[Conductor], rows: Sequence[Values], stack: Stack, size: float) -> tuple[Conductor, ...]:
    """Conductors without an element size of their own get `size` (m, for air) shortened by the index beside them.

    The index is that of the mean permittivity of both sides, the largest along the conductor. Written back to `rows`.
    """
    result = []
    for conductor, values in zip(conductors, rows, strict=True):
        z = conductor_heights(conductor)
        if conductor.element_size is None and len(z):
            index = _index_beside(stack, float(z.min()), float(z.max()))
            values["element_size"] = size / index
            conductor = replace(conductor, element_size=size / index)
        result.append(conductor)
    return tuple(result)


def _index_beside(stack: Stack, low: float, high: float) -> float:
    medium = np.real(stack.permittivity) * stack.permeability
    floor = 0.0 if stack.ground else -np.inf
    heights = [low, high, *(b for b in stack.interfaces if low < b < high)]
    sides = [medium[[int(stack.region_at(max(z, floor), side)) for side in ("below", "above")]].mean() for z in heights]
    return float(np.sqrt(max(*sides, 1.0)))


def layer_rows(stack: Stack) -> list[tuple[str, str, str, str]]:
    """(name, from and to, material, loss) of layers and sheets, top to bottom, as text."""
    rows = []
    for i, layer in reversed(list(enumerate(stack.layers))):
        low, high = stack.interfaces[i] * 1e3, stack.interfaces[i + 1] * 1e3
        mu = f", permeability {layer.permeability:g}" if layer.permeability != 1 else ""
        name = layer.name or f"layer {i + 1}"
        height = f"{low:.5g} to {high:.5g} mm"
        rows.append((name, height, f"permittivity {layer.permittivity:g}{mu}", f"tan δ = {layer.loss_tangent:g}"))
    for i, sheet in enumerate(stack.sheets, start=1):
        z = complex(sheet.impedance)
        text = f"{z.real:g} {'+' if z.imag >= 0 else '−'} j {abs(z.imag):g} ohm per square"
        rows.append((sheet.name or f"sheet {i}", f"{sheet.height * 1e3:.5g} mm", text, ""))
    return rows


def _place(table: str, number: int, values: Mapping[str, object]) -> str:
    return f"[[{table}]] '{values['name']}'" if values["name"] else f"[[{table}]] number {number}"
