"""The stack of a case from its `[[layer]]` and `[[sheet]]` tables, and what it asks of the conductors."""

from __future__ import annotations

from collections.abc import Mapping, Sequence
from dataclasses import replace
from types import MappingProxyType

import numpy as np
from numpy.typing import NDArray

from ..geometry.conductor import Conductor, Disc, Plate, Polygon, Strip, Wire
from ..geometry.errors import InputError, nearest
from ..geometry.lattice import Lattice
from ..geometry.shapes import region_of, wire_points
from ..geometry.stack import Layer, SheetImpedance, Stack
from ..solver.ewald import choose_split
from ..solver.rays import SHEET_DECAY
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
    taken: list[str] = []
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
        _take(values["name"] or f"layer {number}", taken, where)
        built.append(_located(where, Layer, values, "thickness", "permittivity", "loss_tangent", "permeability"))
    stack = Stack(tuple(built), ground)
    films = []
    for number, values in enumerate(sheets, start=1):
        _take(values["name"] or f"sheet {number}", taken, _place("sheet", number, values))
        films.append(_sheet(values, number, stack))
    return Stack(stack.layers, ground, tuple(films))


def refuse_endless(row: Mapping[str, object], where: str) -> None:
    """Tell those who want a half-space that there is none but air; `row` as it stands in the file."""
    given = row.get("thickness")
    word = given.split()[0].lower() if isinstance(given, str) and given.split() else given
    if word in (np.inf, "inf", "+inf", "infinite", "infinity", "half-space"):
        raise InputError(
            f"thickness = {given} makes the layer a half-space.",
            where=f"{where}, key 'thickness'",
            allowed='a length such as "3.2 mm"',
            hint="Above the last layer lies air without end by itself, below the first one the ground or air; layers "
            "cannot follow a half-space.",
        )


def _take(name: str, taken: list[str], where: str) -> None:
    """Names of layers and sheets tell them apart in the table of losses."""
    if name in taken:
        raise InputError(f"the name '{name}' is used twice.", where=where, allowed="another name")
    taken.append(name)


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
    height, hair = values["height"], _hair(stack)
    off = np.abs(height - stack.interfaces)
    if hair > off.min() > 0 and float(stack.snap(height)) not in stack.interfaces:
        raise InputError(
            f"height = {_mm(height)} lies {in_words(float(off.min()), 'length')} off the interface at "
            f"{in_words(float(stack.interfaces[off.argmin()]), 'length')}.",
            where=f"{where}, key 'height'",
            allowed=f"on the interface, or at least {in_words(hair, 'length')} off it",
            hint="A sheet on top of a layer is best given by on = the name of the layer.",
        )
    impedance = complex(values["resistance"], values["reactance"])
    return SheetImpedance(values["height"], impedance, values["name"])


def conductor_heights(conductor: Conductor) -> Floats:
    """Heights of the corners of a conductor, m; empty for mesh files."""
    if isinstance(conductor, Wire):
        return wire_points(conductor)[:, 2]
    if isinstance(conductor, Strip | Plate | Disc | Polygon):
        return region_of(conductor).corners[:, 2]
    return np.zeros(0)


def check_conductors(
    conductors: Sequence[Conductor], stack: Stack, meshed: Mapping[str, tuple[Floats, Floats]] = MappingProxyType({})
) -> None:
    """Refuse conductors just off an interface or sheet, faces across one, and conductors that lie on a sheet.

    `meshed`: triangles (n, 3, 3) and lines (n, 2, 3), m, of the mesh files, by name of the conductor.
    """
    for conductor in conductors:
        for z in _pieces(conductor, meshed):
            _check_elements(z, stack, f"[[conductor]] '{conductor.name}'", may_cross=isinstance(conductor, Wire))


def check_sheets(
    conductors: Sequence[Conductor],
    stack: Stack,
    meshed: Mapping[str, tuple[Floats, Floats]],
    lattice: Lattice,
    k_max: float,
    tolerance: float,
) -> None:
    """Refuse conductors so close to a sheet that the Floquet waves kept do not resolve the field between the two.

    The near part takes a sheet for opaque, as it is for waves of high k_t; the Floquet waves make up for the rest.
    They do so to a few 1e-4 of the impedance where the last of them falls by `SHEET_DECAY` on its way to the sheet
    and back (measured for sheets of 100 to 1e6 ohm, resistive and reactive).
    """
    heights = {c.name: _pieces(c, meshed) for c in conductors}
    tall = any(np.ptp(z, axis=1).any() for pieces in heights.values() for z in pieces if z.size)
    split = choose_split(lattice.area, k_max, tolerance, tall=1.0 if tall else 0.0)
    least = SHEET_DECAY / (2 * split.far_radius)
    for number, sheet in enumerate(stack.sheets, start=1):
        for name, pieces in heights.items():
            above = [np.maximum(z.min(axis=1) - sheet.height, sheet.height - z.max(axis=1)) for z in pieces if z.size]
            gap = float(np.concatenate(above).min()) if above else np.inf
            if gap < least:
                told = f"is {_mm(gap)} away from" if gap > 0 else "reaches through"
                raise InputError(
                    f"conductor '{name}' {told} the sheet at z = {_mm(sheet.height)}.",
                    where=_place("sheet", number, {"name": sheet.name}),
                    allowed=f"at least {in_words(least, 'length')} between sheets and conductors on this lattice",
                    hint="A film closer than that, or around a probe, is beyond this version.",
                )


def _pieces(conductor: Conductor, meshed: Mapping[str, tuple[Floats, Floats]]) -> list[Floats]:
    """Heights (n, corners), m, of the corners of the faces, straight pieces of wire, or elements of a conductor."""
    if conductor.name in meshed:
        return [part[:, :, 2] for part in meshed[conductor.name]]
    z = conductor_heights(conductor)
    return [np.column_stack([z[:-1], z[1:]])] if isinstance(conductor, Wire) else [z[None]]


def _check_elements(z: Floats, stack: Stack, where: str, *, may_cross: bool = False) -> None:
    """Faces, or straight pieces of wire, (n, corners) by the heights of their corners."""
    if not z.size:
        return
    if stack.ground and z.min() < -1e-9 * max(stack.top, float(np.ptp(z))):
        raise InputError(
            f"it reaches z = {in_words(float(z.min()), 'length')}, inside the ground.",
            where=where,
            allowed="heights of 0 and above: the bottom of the first layer is z = 0",
        )
    z, sheets = stack.snap(z), [float(stack.snap(sheet.height)) for sheet in stack.sheets]
    low, high = z.min(axis=1), z.max(axis=1)
    for height in sheets:
        if np.any((low == height) & (high == height)):
            raise InputError(
                f"it lies on the sheet at z = {in_words(height, 'length')}, and would short it.",
                where=where,
                allowed="another height",
            )
    _check_hair(z.ravel(), stack, sheets, where)
    for height in () if may_cross else sorted({*stack.interfaces.tolist(), *sheets}):
        if np.any(across := (low < height) & (high > height)):
            i = int(across.argmax())
            raise InputError(
                f"its face reaches from z = {_mm(low[i])} to {_mm(high[i])}, across the interface or sheet at "
                f"{in_words(height, 'length')}.",
                where=where,
                allowed="faces, and elements of a mesh file, within one layer",
                hint="Split it there into two that touch; conductors of kind 'wire' may cross.",
            )


def _check_hair(z: Floats, stack: Stack, sheets: list[float], where: str) -> None:
    hair = _hair(stack)
    for height in sorted({*stack.interfaces.tolist(), *sheets}):
        off = np.abs(z - height)
        if np.any(close := (off > 0) & (off < hair)):
            i = int(close.argmax())
            raise InputError(
                f"a corner at z = {_mm(z[i])} lies {in_words(float(off[i]), 'length')} off the "
                f"{'interface' if height in stack.interfaces else 'sheet'} at {in_words(height, 'length')}.",
                where=where,
                allowed=f"on the interface, or at least {in_words(hair, 'length')} off it"
                if height in stack.interfaces
                else f"at least {in_words(hair, 'length')} off it",
                hint="Heights are best given by the same parameters as the thicknesses.",
            )


def _hair(stack: Stack) -> float:
    return HAIR * min((layer.thickness for layer in stack.layers), default=0.0)


def _mm(z: float) -> str:
    """A height with the digits that tell it from its neighbours."""
    return f"{float(z) * 1e3:.10g} mm"


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


def stack_summary(stack: Stack) -> str:
    """The layers in one line, bottom to top."""
    rows = [
        f"{layer.name or f'layer {i}'} {layer.thickness * 1e3:.5g} mm (permittivity {layer.permittivity:g})"
        for i, layer in enumerate(stack.layers, start=1)
    ]
    films = f"; {len(stack.sheets)} {'sheet' if len(stack.sheets) == 1 else 'sheets'}" if stack.sheets else ""
    return f"{'ground' if stack.ground else 'air'} | {' | '.join(rows)} | air{films}"


def _place(table: str, number: int, values: Mapping[str, object]) -> str:
    return f"[[{table}]] '{values['name']}'" if values["name"] else f"[[{table}]] number {number}"
