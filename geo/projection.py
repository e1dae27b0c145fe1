"""Coordinate systems: what coordinates mean, whether they can be meant, and the earth under them.

Distances are never measured in a projection. Coordinates become longitude and latitude on the boundary's own
datum, those become earth-centred X, Y, Z, and the last step is one geodesic (Karney 2013,
doi:10.1007/s00190-012-0578-z). A projection is used for drawing only.
"""

from __future__ import annotations

import warnings
from dataclasses import dataclass
from functools import lru_cache
from typing import Final

import numpy as np
import pyproj
from pyproj import CRS, Geod
from pyproj.enums import TransformDirection
from pyproj.exceptions import CRSError, ProjError
from pyproj.network import set_network_enabled  # type: ignore[attr-defined]  # public, but not in __all__
from pyproj.transformer import TransformerGroup

from geo.arrays import Matrix, Vector
from geo.errors import GeometryError
from geo.notes import Note

PLAIN: Final = "plain"  # the word by which a person declares that x and y are lengths in a plane
_DATUM_SHIFT_M: Final = 1.0  # worth a note from here on

# Grid files are never fetched: a restricted server must get what every other machine gets, and say so.
set_network_enabled(active=False)


@dataclass(frozen=True, slots=True, kw_only=True)
class Earth:
    """A geographic coordinate system in degrees and its ellipsoid.

    Attributes
    ----------
    crs
        Two-dimensional, geographic, in degrees.
    semi_major_m, flattening
        Of its ellipsoid.
    """

    crs: CRS
    semi_major_m: float
    flattening: float

    @property
    def geod(self) -> Geod:
        """Geodesics on this ellipsoid."""
        return Geod(a=self.semi_major_m, f=self.flattening)

    def centred(self, longitude: Vector, latitude: Vector) -> Matrix:
        """Earth-centred X, Y, Z in metres of places on the ellipsoid, shape (n, 3)."""
        squared = self.flattening * (2.0 - self.flattening)
        lam, phi = np.radians(longitude), np.radians(latitude)
        sine, cosine = np.sin(phi), np.cos(phi)
        normal = self.semi_major_m / np.sqrt(1.0 - squared * sine**2)
        out = np.empty((len(lam), 3))
        out[:, 0] = normal * cosine * np.cos(lam)
        out[:, 1] = normal * cosine * np.sin(lam)
        out[:, 2] = normal * (1.0 - squared) * sine
        return out

    def degrees(self, centred: Matrix) -> tuple[Vector, Vector]:
        """Longitude and latitude of places within some metres of the ellipsoid (one step of Bowring 1976)."""
        major, flat = self.semi_major_m, self.flattening
        minor = major * (1.0 - flat)
        squared = flat * (2.0 - flat)
        x, y, z = centred[:, 0], centred[:, 1], centred[:, 2]
        radius = np.hypot(x, y)
        reduced = np.arctan2(z * major, radius * minor)
        latitude = np.arctan2(
            z + squared / (1.0 - squared) * minor * np.sin(reduced) ** 3,
            radius - squared * major * np.cos(reduced) ** 3,
        )
        return np.degrees(np.arctan2(y, x)), np.degrees(latitude)

    def length_m(self, longitude: Vector, latitude: Vector) -> Vector:
        """Geodesic length of each step of a path through n places, shape (n - 1,)."""
        if len(longitude) < 2:
            return np.zeros(0)
        _, _, length = self.geod.inv(longitude[:-1], latitude[:-1], longitude[1:], latitude[1:])
        return np.asarray(length)


def read_crs(text: str | CRS) -> CRS:
    """Understand a coordinate system's name or definition.

    Raises
    ------
    GeometryError
        Unknown, or of a kind that doesn't say where on the earth something is.
    """
    try:
        crs = CRS.from_user_input(text).to_2d()
    except CRSError:
        raise GeometryError(
            f"{str(text)[:60]!r} is not a coordinate system that is known here.",
            'Name it by its code, such as "EPSG:4326", or write "plain" for lengths in a plane.',
            code="unknown crs",
        ) from None
    if crs.is_bound and crs.source_crs is not None:
        crs = crs.source_crs.to_2d()
    if crs.is_compound and crs.sub_crs_list:
        crs = crs.sub_crs_list[0].to_2d()
    if crs.geodetic_crs is None or not (crs.is_geographic or crs.is_projected):
        raise GeometryError(
            f"The coordinate system {crs.name!r} does not say where on the earth its coordinates are.",
            'Name a geographic or projected one, or write "plain" for lengths in a plane.',
            code="unknown crs",
        )
    return crs


def missing_crs(x: Vector, y: Vector, what: str) -> GeometryError:
    """The refusal to guess what coordinates without a coordinate system mean."""
    return GeometryError(
        f"{what}: nothing says which coordinate system the coordinates are in; "
        f"they lie between {span(x)} across and {span(y)} up.",
        'Name it: "EPSG:4326" for longitude and latitude in degrees, the code of a projected one, '
        'or "plain" for lengths in a plane.',
        code="no crs",
    )


def span(values: Vector) -> str:
    """The least and greatest of some values, for a sentence."""
    return f"{np.min(values):.7g} and {np.max(values):.7g}"


def same_crs(first: CRS, second: CRS) -> bool:
    """Whether two systems mean the same in the plane, whatever their axis order and third dimension."""
    return bool(first.to_2d().equals(second.to_2d(), ignore_axis_order=True))


def earth_of(crs: CRS) -> Earth:
    """The earth on which a system's coordinates are longitude and latitude without any datum shift."""
    geographic = crs.geodetic_crs
    assert geographic is not None  # read_crs lets nothing else through
    geographic = geographic.to_2d()
    degrees = all(axis.unit_name == "degree" for axis in geographic.axis_info)
    greenwich = geographic.prime_meridian is None or geographic.prime_meridian.longitude == 0.0
    if not (degrees and greenwich and geographic.is_geographic):
        geographic = CRS.from_epsg(4326)
    geod = geographic.get_geod() or Geod(ellps="WGS84")
    return Earth(crs=geographic, semi_major_m=geod.a, flattening=geod.f)


def check_coordinates(x: Vector, y: Vector, crs: CRS, what: str) -> None:
    """Refuse coordinates that can't be meant in a system.

    Raises
    ------
    GeometryError
        Not finite, outside the globe, axes that are certainly swapped, degrees in a system of metres.
    """
    if not len(x):
        return
    broken = np.flatnonzero(~(np.isfinite(x) & np.isfinite(y)))
    if len(broken):
        raise GeometryError(
            f"{what}: coordinate {broken[0] + 1} of {len(x)} is not a finite number.",
            "Mend or leave out that place.",
            code="not finite",
        )
    if crs.is_geographic:
        _check_degrees(x, y, crs, what)
    elif max(np.max(np.abs(x)), np.max(np.abs(y))) <= 360.0 and len(x) > 1:
        raise GeometryError(
            f"{what}: coordinates between {span(x)} across and {span(y)} up look like degrees, "
            f"but {crs.name} is in {crs.axis_info[0].unit_name}s.",
            'Name the system they are in, such as "EPSG:4326".',
            code="range",
        )


def _check_degrees(x: Vector, y: Vector, crs: CRS, what: str) -> None:
    half_turn = 180.0 if crs.axis_info[0].unit_name == "degree" else 200.0
    fits = np.max(np.abs(y)) <= half_turn / 2 and np.min(x) >= -2 * half_turn and np.max(x) <= 2 * half_turn
    if fits:
        return
    if np.max(np.abs(x)) <= half_turn / 2 and np.max(np.abs(y)) <= 2 * half_turn:
        raise GeometryError(
            f"{what}: latitudes reach {y[np.argmax(np.abs(y))]:.7g}, which no latitude can; "
            "longitude and latitude seem to be swapped.",
            "Name the longitude first.",
            code="swapped axes",
        )
    raise GeometryError(
        f"{what}: coordinates between {span(x)} across and {span(y)} up are not degrees of {crs.name}.",
        "Name the projected coordinate system that they are in.",
        code="range",
    )


def to_degrees(
    x: Vector, y: Vector, crs: CRS, *, earth: Earth, what: str = "The places"
) -> tuple[Vector, Vector]:
    """Longitude and latitude on ``earth`` of coordinates in ``crs``.

    Parameters
    ----------
    x, y
        Easting and northing, or longitude and latitude, shape (n,).
    what
        Whose coordinates, to begin a sentence with.

    Raises
    ------
    GeometryError
        As `check_coordinates`; or some place lies where the system has no meaning.
    """
    x, y = np.asarray(x, dtype=np.float64), np.asarray(y, dtype=np.float64)
    check_coordinates(x, y, crs, what)
    if same_crs(crs, earth.crs):
        return x, y
    try:
        longitude, latitude = _transformer(crs, earth.crs).transform(x, y)
    except ProjError as error:
        raise GeometryError(
            f"{what}: coordinates in {crs.name} could not be turned into longitude and latitude.",
            "Check the name of the coordinate system.",
            code="range",
        ) from error
    lost = np.flatnonzero(~(np.isfinite(longitude) & np.isfinite(latitude)))
    if len(lost):
        raise GeometryError(
            f"{what}: place {lost[0] + 1} of {len(x)}, at {x[lost[0]]:.7g}, {y[lost[0]]:.7g}, "
            f"lies outside what {crs.name} can describe.",
            "Check the coordinates and the name of their system.",
            code="range",
        )
    return np.asarray(longitude), np.asarray(latitude)


def from_degrees(longitude: Vector, latitude: Vector, crs: CRS, *, earth: Earth) -> tuple[Vector, Vector]:
    """The inverse of `to_degrees`; what the system can't describe becomes inf."""
    if same_crs(crs, earth.crs):
        return longitude, latitude
    x, y = _transformer(crs, earth.crs).transform(longitude, latitude, direction=TransformDirection.INVERSE)
    return np.asarray(x), np.asarray(y)


@lru_cache(maxsize=16)
def _transformer(source: CRS, target: CRS) -> pyproj.Transformer:
    return pyproj.Transformer.from_crs(source, target, always_xy=True)


def datum_notes(units: CRS, earth: Earth) -> tuple[Note, ...]:
    """What is lost when the units' datum differs from the boundary's: nothing, or a note with the metres."""
    own = units.geodetic_crs
    if own is None or same_crs(own, earth.crs):
        return ()
    with warnings.catch_warnings():
        warnings.simplefilter(
            "ignore"
        )  # it warns of a missing grid; so does the note below, where it is seen
        group = TransformerGroup(own.to_2d(), earth.crs, always_xy=True)
    if not group.transformers:
        accuracy = -1.0
    else:
        accuracy = group.transformers[0].accuracy
    if 0.0 <= accuracy <= _DATUM_SHIFT_M and group.best_available:
        return ()
    known = f"good to about {accuracy:.3g} m" if accuracy >= 0 else "of unknown accuracy"
    missing = "" if group.best_available else "; the grid file of a better one is not on this machine"
    return (
        Note(
            code="datum",
            severity="warning",
            sentence=(
                f"Units are on {own.name}, the boundary on {earth.crs.name}: "
                f"the shift between them is {known}{missing}."
            ),
            remedy="Keep the donut and the bandwidth well above that, or bring both to one datum elsewhere.",
        ),
    )


def region_notes(longitude: Vector, latitude: Vector, crs: CRS) -> tuple[Note, ...]:
    """A note where an outline lies quite outside the region that its projected system was made for."""
    region = crs.area_of_use
    if region is None or not crs.is_projected:
        return ()
    middle = float(np.median(longitude)), float(np.median(latitude))
    width = (region.east - region.west) % 360.0 or 360.0
    inside = (middle[0] - region.west) % 360.0 <= width and region.south <= middle[1] <= region.north
    if inside:
        return ()
    return (
        Note(
            code="region",
            severity="check",
            sentence=(
                f"The outline lies about longitude {middle[0]:.1f} and latitude {middle[1]:.1f}; {crs.name} "
                f"is made for {region.west:g} to {region.east:g} and {region.south:g} to {region.north:g}."
            ),
            remedy="Check the name of the coordinate system.",
        ),
    )


def drawing_plane(
    longitude: Vector, latitude: Vector, *, centre: tuple[float, float], earth: Earth
) -> tuple[Vector, Vector]:
    """Azimuthal equidistant x and y in metres about a centre (longitude, latitude): for pictures only."""
    plane = CRS.from_dict(
        {"proj": "aeqd", "lon_0": centre[0], "lat_0": centre[1], "a": earth.semi_major_m, "rf": 1.0 / earth.flattening}
        if earth.flattening
        else {"proj": "aeqd", "lon_0": centre[0], "lat_0": centre[1], "R": earth.semi_major_m}
    )  # fmt: skip
    x, y = pyproj.Proj(plane)(longitude, latitude)
    return np.asarray(x), np.asarray(y)
