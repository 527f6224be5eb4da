"""The plane layers the conductors sit in: dielectrics, thin sheets, ground below and air above."""

from __future__ import annotations

from collections.abc import Sequence
from dataclasses import dataclass
from functools import cached_property
from math import isfinite
from typing import Literal

import numpy as np
from numpy.typing import ArrayLike, NDArray

from .errors import InputError

Floats = NDArray[np.float64]
Complexes = NDArray[np.complex128]
Ints = NDArray[np.int64]
Side = Literal["above", "below"]

SNAP = 1e-6
"""Heights nearer to an interface than this share of the thinnest layer lie on it."""


@dataclass(frozen=True)
class Layer:
    """One homogeneous layer.

    Parameters
    ----------
    thickness
        Metres, above zero.
    permittivity, permeability
        Relative, real parts. At least 1; with `artificial` anything above zero.
    loss_tangent
        The complex permittivity is ``permittivity (1 - j loss_tangent)``.
    name
        Used in messages.
    artificial
        Allows a permittivity or permeability below 1 (rodded media, plasma above its critical frequency).

    Raises
    ------
    InputError
        For a thickness, permittivity, permeability or loss tangent outside its range, or not a number.
    """

    thickness: float
    permittivity: float
    loss_tangent: float = 0.0
    permeability: float = 1.0
    name: str = ""
    artificial: bool = False

    def __post_init__(self) -> None:
        where = f"[[layer]] '{self.name}'" if self.name else "[[layer]]"
        _require("thickness", self.thickness, self.thickness > 0, where, "a finite length above 0 m")
        _require("loss_tangent", self.loss_tangent, self.loss_tangent >= 0, where, "0 or more")
        for key in ("permittivity", "permeability"):
            value = getattr(self, key)
            good = value > 0 if self.artificial else value >= 1
            allowed = (
                "above 0" if self.artificial else "1 or more; above 0 when the layer is marked artificial"
            )
            _require(key, value, good, where, allowed)

    @property
    def complex_permittivity(self) -> complex:
        """Relative permittivity for exp(+jwt): its imaginary part is zero or negative."""
        return complex(self.permittivity, -self.permittivity * self.loss_tangent)


@dataclass(frozen=True)
class SheetImpedance:
    """A sheet much thinner than anything else: ``E_t = impedance J_t``, the same for both polarisations.

    Resistive films have a real impedance, meshes and patch screens far below resonance a reactive one.

    Parameters
    ----------
    height
        Metres above the bottom of the stack.
    impedance
        Ohm per square; real part zero or positive, not zero altogether.

    Raises
    ------
    InputError
        For an impedance that is zero, active or not a number, or a height that is not a number.
    """

    height: float
    impedance: complex
    name: str = ""

    def __post_init__(self) -> None:
        where = f"[[sheet]] '{self.name}'" if self.name else "[[sheet]]"
        _require("height", self.height, True, where, "a finite height in metres")
        z = complex(self.impedance)
        good = isfinite(z.real) and isfinite(z.imag) and z.real >= 0 and z != 0
        if not good:
            raise InputError(
                f"impedance = {self.impedance} ohm is not that of a passive sheet.",
                where=where,
                allowed="a finite impedance other than 0 with a real part of 0 or more",
                hint="" if z else "A perfectly conducting plane is `ground`.",
            )


def _require(key: str, value: float, good: bool, where: str, allowed: str) -> None:
    if not (isfinite(value) and good):
        raise InputError(f"{key} = {value} is out of range.", where=where, allowed=allowed)


@dataclass(frozen=True)
class Stack:
    """Layers from z = 0 upwards; below them a perfectly conducting ground or open air, above them air.

    Regions are numbered upwards: 0 the half-space below (or the ground), 1..n the layers, n + 1 the air
    above.

    Parameters
    ----------
    layers
        Bottom to top; may be empty (free space, or bare ground).
    ground
        A perfect conductor fills z < 0.
    sheets
        Thin sheets at heights between 0 and the top, the ground itself excluded.

    Raises
    ------
    InputError
        If a sheet lies outside the stack or on the ground, or two lie at one height.
    """

    layers: tuple[Layer, ...] = ()
    ground: bool = False
    sheets: tuple[SheetImpedance, ...] = ()

    def __post_init__(self) -> None:
        object.__setattr__(self, "layers", tuple(self.layers))
        object.__setattr__(self, "sheets", tuple(self.sheets))
        slack, seen = self._slack, []
        for sheet in self.sheets:
            where = f"[[sheet]] '{sheet.name}'" if sheet.name else "[[sheet]]"
            if not -slack <= sheet.height <= self.top + slack:
                raise InputError(
                    f"height = {sheet.height:g} m lies outside the layers.",
                    where=where,
                    allowed=f"0 to {self.top:g} m",
                    hint="Add a layer of permittivity 1 to reach further.",
                )
            if self.ground and sheet.height <= slack:
                raise InputError(
                    f"height = {sheet.height:g} m lies on the ground, which shorts the sheet.",
                    where=where,
                    allowed="heights above 0 m over a ground",
                )
            if any(abs(sheet.height - other) <= slack for other in seen):
                raise InputError(
                    f"height = {sheet.height:g} m carries two sheets.",
                    where=where,
                    allowed="one sheet per height",
                    hint="Two sheets at one height act as one with their impedances in parallel.",
                )
            seen.append(sheet.height)

    @cached_property
    def interfaces(self) -> Floats:
        """Heights of the n + 1 faces of the n layers, from 0 to the top, metres."""
        return np.concatenate([[0.0], np.cumsum([layer.thickness for layer in self.layers])])

    @property
    def top(self) -> float:
        """Height of the uppermost interface, metres."""
        return float(self.interfaces[-1])

    @property
    def _slack(self) -> float:
        return SNAP * min((layer.thickness for layer in self.layers), default=0.0)

    @cached_property
    def permittivity(self) -> Complexes:
        """Complex relative permittivity of every region, shape (n + 2,); 1 stands for the ground."""
        return np.array([1.0, *(layer.complex_permittivity for layer in self.layers), 1.0], dtype=complex)

    @cached_property
    def permeability(self) -> Floats:
        """Relative permeability of every region, shape (n + 2,); 1 stands for the ground."""
        return np.array([1.0, *(layer.permeability for layer in self.layers), 1.0])

    @property
    def is_air(self) -> bool:
        """True when nothing but air (and perhaps the ground) is there: no contrast, no loss, no sheet."""
        return bool(np.all(self.permittivity == 1) and np.all(self.permeability == 1) and not self.sheets)

    @property
    def is_lossless(self) -> bool:
        """True when neither a layer nor a sheet absorbs power."""
        return bool(np.all(self.permittivity.imag == 0)) and all(
            complex(s.impedance).real == 0 for s in self.sheets
        )

    def snap(self, z: ArrayLike) -> Floats:
        """Heights with those within rounding of an interface (`SNAP`) moved onto it, shape of `z`."""
        z = np.asarray(z, dtype=float)
        nearest = self.interfaces[np.abs(z[..., None] - self.interfaces).argmin(axis=-1)]
        return np.where(np.abs(z - nearest) <= self._slack, nearest, z)

    def region_at(self, z: ArrayLike, side: Side | Sequence[Side] | NDArray[np.str_] = "above") -> Ints:
        """Region number of every height; a height on an interface belongs to the region on its given `side`.

        Parameters
        ----------
        z
            Heights, any shape, metres.
        side
            "above" or "below", one for all or one each.

        Raises
        ------
        InputError
            If a height lies inside the ground, or `side` is neither word.
        """
        z, side = self.snap(z), np.asarray(side)
        if not np.all(np.isin(side, ("above", "below"))):
            raise InputError(f"side = {side} is unknown.", allowed="'above' or 'below'")
        above = np.searchsorted(self.interfaces, z, side="right")
        region = np.where(side == "above", above, np.searchsorted(self.interfaces, z, side="left"))
        if self.ground and np.any(z < 0):
            raise InputError(
                f"height = {z.min():g} m lies inside the ground.", allowed="heights of 0 m or more"
            )
        return np.where(self.ground & (region == 0), 1, region).astype(np.int64)

    def layer_at(self, z: float, side: Side = "above") -> Layer | None:
        """The layer at a height, or None in the air above or below; on an interface the one on that
        `side`."""
        region = int(self.region_at(z, side))
        return self.layers[region - 1] if 1 <= region <= len(self.layers) else None

    def __repr__(self) -> str:
        rows = [
            f"{layer.name or 'layer'} {layer.thickness * 1e3:.4g} mm eps {layer.permittivity:g}"
            for layer in self.layers
        ]
        bottom, middle = "ground" if self.ground else "air", " | ".join(rows) or "nothing"
        return f"Stack({bottom} | {middle} | air, {len(self.sheets)} sheets)"
