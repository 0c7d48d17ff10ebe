"""Settings of the optics as they truly are: one table per mount."""

from __future__ import annotations

from collections.abc import Iterator
from typing import Annotated, Literal

from pydantic import Field

from drivers.settings import ListOf, StrictModel


class GhostOptions(StrictModel):
    """`[world.options.optics.ghosts]`: the ruling engine moved every groove by a sine wave."""

    grooves_per_period: float = Field(gt=1.0, le=1e6)
    amplitude_nm: float = Field(gt=0.0, le=1000.0)  # of the grooves' displacement
    highest: int = Field(default=2, ge=1, le=10)  # ghosts on either side of a line


class GratingOptions(StrictModel):
    """What all mounts have in common. `order` is the one that `truth()` speaks of."""

    groove_density_per_mm: float = Field(gt=0.0, le=10000.0)
    ruled_width_mm: float = Field(gt=0.0, le=1000.0)
    order: int = Field(default=1, ge=1, le=20)
    entrance_slit_um: float = Field(gt=0.0, le=5000.0)
    exit_slit_um: float = Field(gt=0.0, le=5000.0)
    coma_um: float = Field(default=0.0, ge=0.0, le=100.0)  # mean length of a one-sided tail of the slit image
    # how bright orders 1, 2, 3... are against what a line's strength says; without it `order` is alone
    order_efficiency: ListOf[Annotated[float, Field(ge=0.0, le=10.0)]] = Field(default=(), max_length=20)
    zero_order_efficiency: float = Field(default=0.0, ge=0.0, le=10.0)
    stray_fraction: float = Field(default=0.0, ge=0.0, le=0.1)  # of all light, at any rotation
    ghosts: GhostOptions | None = None

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        if self.order_efficiency and self.order > len(self.order_efficiency):
            yield "order_efficiency", f"must have a number for every order up to order = {self.order}"

    @property
    def efficiencies(self) -> dict[int, float]:
        """By order; an order that is not there is dark."""
        orders = dict(enumerate(self.order_efficiency, start=1)) or {self.order: 1.0}
        if self.zero_order_efficiency:
            orders[0] = self.zero_order_efficiency
        return {order: efficiency for order, efficiency in orders.items() if efficiency}


class PlaneOptions(GratingOptions):
    """`[world.options.optics]` with a plane grating between two arms at a fixed angle."""

    mount: Literal["plane"] = "plane"
    focal_length_mm: float = Field(gt=0.0, le=20000.0)
    included_angle_deg: float = Field(ge=0.0, lt=180.0)


class LittrowOptions(GratingOptions):
    """`[world.options.optics]` with one arm for both beams, which differ in height at most."""

    mount: Literal["littrow"]
    focal_length_mm: float = Field(gt=0.0, le=20000.0)
    off_plane_angle_deg: float = Field(default=0.0, ge=0.0, lt=90.0)


class ConcaveOptions(GratingOptions):
    """`[world.options.optics]` with a spherical grating turned about its pole between two fixed arms.

    The slits stand on the Rowland circle of the rotation at which `focused_nm` passes in `focused_order`.
    """

    mount: Literal["concave"]
    radius_mm: float = Field(gt=0.0, le=50000.0)
    included_angle_deg: float = Field(ge=0.0, lt=180.0)
    focused_nm: float = Field(gt=100.0, lt=20000.0)
    focused_order: int = Field(default=1, ge=1, le=20)

    def cross_checks(self) -> Iterator[tuple[str, str]]:
        yield from super().cross_checks()
        if self.ruled_width_mm >= self.radius_mm:
            yield "ruled_width_mm", f"must be below radius_mm = {self.radius_mm:g}"


OpticsOptions = Annotated[PlaneOptions | LittrowOptions | ConcaveOptions, Field(discriminator="mount")]
