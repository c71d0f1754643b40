"""The [imaging] section of a scan file: the camera, the expansion, and what counts as seen.

In:  raw TOML values.
Out: `ImagingSection`, and sentences about what does not fit together. Free of jax; pydantic goes no further.
"""

from collections.abc import Callable, Iterator
from typing import Annotated, Any

from pydantic import BaseModel, ConfigDict, PlainValidator

from gutz.scan import fields

DETECTIONS = ("absorption", "counting")
FLIGHTS = ("free", "lens")


def _time(value: Any) -> float:
    """Convert a time given as text with a unit, into seconds."""
    found = fields.quantity(value, "time", "20 ms")
    if not found > 0:
        raise ValueError("must be greater than 0")
    return found


def _size(value: Any) -> float:
    """Convert a length that must be there."""
    found = fields.length(value)
    if not found > 0:
        raise ValueError("must be greater than 0")
    return found


def _spread(value: Any) -> float:
    """Convert a length that may be 0."""
    found = fields.length(value)
    if found < 0:
        raise ValueError("must be at least 0")
    return found


def _mass(value: Any) -> float:
    found = fields.quantity(value, "mass", "86.9 u")
    if not found > 0:
        raise ValueError("must be greater than 0")
    return found


def _share(value: Any) -> float:
    number = fields.real(above=0.0)(value)
    if number > 1:
        raise ValueError("must be greater than 0 and at most 1")
    return number


def _fluctuation(value: Any) -> float:
    number = fields.real(0.0)(value)
    if number > 1:
        raise ValueError("must be from 0 to 1, relative")
    return number


class ImagingSection(BaseModel):
    """[imaging]: from the lattice to the picture, and what counts as seen."""

    model_config = ConfigDict(extra="forbid", frozen=True)

    tof: Annotated[float | None, PlainValidator(_time)] = None
    flight: Annotated[str, PlainValidator(fields.one_of(*FLIGHTS))] = "free"
    along: Annotated[str, PlainValidator(fields.one_of("x", "y", "z"))] = "z"
    detection: Annotated[str, PlainValidator(fields.one_of(*DETECTIONS))] = "absorption"
    efficiency: Annotated[float, PlainValidator(_share)] = 1.0
    resolution: Annotated[float, PlainValidator(_spread)] = 3e-6
    pixel: Annotated[float, PlainValidator(_size)] = 3e-6
    picture: Annotated[float | None, PlainValidator(_size)] = None
    photons: Annotated[float | None, PlainValidator(fields.real(above=0.0))] = None
    light: Annotated[float | None, PlainValidator(_size)] = None
    fluctuation: Annotated[float, PlainValidator(_fluctuation)] = 0.0
    jitter: Annotated[float, PlainValidator(_spread)] = 0.0
    technical: Annotated[float, PlainValidator(fields.real(1.0))] = 1.0
    shots: Annotated[float, PlainValidator(fields.real(1.0))] = 100.0
    significance: Annotated[float, PlainValidator(fields.real(above=0.0))] = 5.0
    sites: Annotated[tuple[float, ...], PlainValidator(fields.box)] = (40.0, 40.0, 40.0)
    planes: Annotated[int, PlainValidator(fields.whole(1, 100_000))] = 1
    mass: Annotated[Any, PlainValidator(fields.per_species(_mass))] = None
    spacing: Annotated[float | None, PlainValidator(_size)] = None
    lattice_depth: Annotated[float | None, PlainValidator(fields.real(above=0.0))] = None


def of_presence(data: dict[str, Any], given: Callable[[str], bool]) -> Iterator[tuple[str, str]]:
    """What [imaging] must say, and must not: (key, sentence)."""
    if "imaging" not in data:
        return
    if not given("imaging.tof"):
        yield "imaging.tof", 'is missing; give the time of flight, for example "20 ms"'
    for name, example in (("mass", '"86.9 u"'), ("spacing", '"532 nm"'), ("lattice_depth", "15")):
        here = name in data["imaging"]
        if "lattice" in data and here:
            yield f"imaging.{name}", "must be left out, because it follows from [lattice]"
        elif "lattice" not in data and not here:
            yield f"imaging.{name}", f"is missing; without [lattice] give it, for example {example}"


def of_combination(spec: Any) -> Iterator[tuple[str, str]]:
    """Values of a checked `gutz.scan.spec.Spec` that do not fit together: (key, sentence)."""
    section: ImagingSection | None = spec.imaging
    if section is None:
        return
    species, dim = spec.species, spec.dim
    if species == 1:
        yield "imaging", "needs two species, because pairs and anti-pairs are looked for"
    if dim == 1:
        yield "imaging", "needs dim = 2 or 3: tubes have no order at T > 0 whose peak could be narrow"
    if isinstance(section.mass, tuple) and len(section.mass) != species:
        yield "imaging.mass", f"has {len(section.mass)} entries; it must have {species}, one per species"
    if section.picture is not None and section.pixel * 8 > section.picture:
        yield (
            "imaging.pixel",
            (
                f"{section.pixel * 1e6:g} um is too large for a picture of {section.picture * 1e6:g} um; the "
                "picture must be at least 8 pixels wide"
            ),
        )
    if dim == 2 and section.along != "z":
        yield "imaging.along", "must be z where dim = 2: planes are looked at from above"
    if dim == 3 and section.planes > 1:
        yield "imaging.planes", "must be left out where dim = 3: the order is coherent in all directions"
    if section.detection == "counting" and section.photons is not None:
        yield "imaging.photons", "must be left out where atoms are counted one by one"
    if spec.trap is not None and section.sites != (40.0, 40.0, 40.0):
        yield "imaging.sites", "must be left out, because [trap] gives the size of the cloud"
