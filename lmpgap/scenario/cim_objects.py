"""Reading CIM XML (IEC 61970-552): objects of one or several RDF/XML files, merged by identifier.

Files of the profiles of IEC 61970-600 (equipment, steady-state hypothesis, topology, state variables, geography) may
come one by one, or together in a zip archive. Namespaces, and with them the version of the information model, do
not matter: names such as ``ACLineSegment.r`` have kept their meaning.
"""

from __future__ import annotations

import io
import math
import zipfile
from collections import defaultdict
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, field
from pathlib import Path
from xml.etree import ElementTree

from lmpgap.errors import DataError, Fault

LARGEST_BYTES = 4_000_000_000
"""Archives that unpack to more than this are refused before anything is unpacked."""

_RDF = "{http://www.w3.org/1999/02/22-rdf-syntax-ns#}"


@dataclass
class CimObject:
    """One object with the properties that all files say of it.

    Attributes
    ----------
    identifier
        Without the marks that differ between profiles (``#``, ``_``, ``urn:uuid:``).
    kind
        Class name, e.g. ``"ACLineSegment"``.
    values
        Text of each property, by its full name; a reference holds the identifier that it points to, an
        enumeration the part after ``#``.
    """

    identifier: str
    kind: str
    values: dict[str, str] = field(default_factory=dict)

    @property
    def name(self) -> str:
        """The object's name, or its identifier without one."""
        return self.values.get("IdentifiedObject.name", "").strip() or self.identifier

    def text(self, *names: str) -> str:
        """Return the first of the properties that is there, or an empty text."""
        return next((self.values[name] for name in names if name in self.values), "")

    def number(self, *names: str, default: float = math.nan) -> float:
        """Return the first of the properties that is there as a number.

        Raises
        ------
        DataError
            When it is not a number.
        """
        text = self.text(*names)
        if not text:
            return default
        try:
            value = float(text)
        except ValueError:
            value = math.nan
        if not math.isfinite(value):
            raise DataError(
                f"{self.kind} {self.name!r} has a property that is no number",
                [Fault(table=self.kind, message="is not a finite number", column=names[0], value=text[:80])],
            )
        return value

    def flag(self, *names: str, default: bool) -> bool:
        """Return the first of the properties that is there as true or false."""
        text = self.text(*names).strip().lower()
        return default if not text else text == "true"


class CimModel:
    """All objects of a model, by identifier and by class."""

    def __init__(self, objects: Iterable[CimObject]) -> None:
        self.objects: dict[str, CimObject] = {}
        for item in objects:
            known = self.objects.get(item.identifier)
            if known is None:
                self.objects[item.identifier] = item
            else:
                known.values.update(item.values)
        self._by_kind: dict[str, list[CimObject]] = defaultdict(list)
        for item in self.objects.values():
            self._by_kind[item.kind].append(item)

    def of(self, *kinds: str) -> list[CimObject]:
        """Return the objects of some classes, in the order of the files."""
        return [item for kind in kinds for item in self._by_kind.get(kind, [])]

    def kinds(self) -> dict[str, int]:
        """Return how many objects there are of each class."""
        return {kind: len(items) for kind, items in sorted(self._by_kind.items())}

    def get(self, identifier: str) -> CimObject | None:
        """Return an object, ``None`` when nothing has this identifier."""
        return self.objects.get(identifier)

    def referring(self, name: str) -> dict[str, list[CimObject]]:
        """Return the objects that point somewhere with a property, by the identifier they point to."""
        found: dict[str, list[CimObject]] = defaultdict(list)
        for item in self.objects.values():
            if name in item.values:
                found[item.values[name]].append(item)
        return found


class _NoDoctype(ElementTree.TreeBuilder):
    """Refuses document types: CIM XML has none, and entities can be made to grow without end."""

    def doctype(self, name: str, pubid: str | None, system: str | None) -> None:
        raise DataError("the file declares a document type, which CIM XML never does; it is not read")


def read_cim(files: Iterable[Path]) -> CimModel:
    """Return the objects of CIM XML files and of zip archives with such files.

    Raises
    ------
    DataError
        For a file that cannot be read or is no CIM XML.
    """
    objects: list[CimObject] = []
    for path in files:
        for name, content in _contents(path):
            objects += _objects(name, content)
    if not objects:
        raise DataError("there are no CIM objects in the file")
    return CimModel(objects)


def _contents(path: Path) -> Iterator[tuple[str, bytes]]:
    try:
        if not zipfile.is_zipfile(path):
            yield path.name, path.read_bytes()
            return
        with zipfile.ZipFile(path) as archive:
            members = [m for m in archive.infolist() if m.filename.lower().endswith((".xml", ".rdf"))]
            if sum(member.file_size for member in members) > LARGEST_BYTES:
                raise DataError(f"{path.name} unpacks to more than {LARGEST_BYTES / 1e9:.0f} GB; it is not read")
            if not members:
                raise DataError(f"{path.name} holds no XML file")
            for member in members:
                yield f"{path.name}/{member.filename}", archive.read(member)
    except (OSError, zipfile.BadZipFile, RuntimeError, NotImplementedError) as error:
        raise DataError(f"{path} cannot be read: {error}") from error


def _objects(name: str, content: bytes) -> list[CimObject]:
    parser = ElementTree.XMLParser(target=_NoDoctype())
    try:
        root = ElementTree.parse(io.BytesIO(content), parser=parser).getroot()
    except ElementTree.ParseError as error:
        raise DataError(f"{name} is not well-formed XML: {error}") from error
    if root.tag != f"{_RDF}RDF":
        raise DataError(f"{name} is not CIM XML: its root is {_local(root.tag)!r} and not rdf:RDF")
    return [made for element in root if (made := _object(element)) is not None]


def _object(element: ElementTree.Element) -> CimObject | None:
    identifier = _identifier(element.get(f"{_RDF}ID") or element.get(f"{_RDF}about") or "")
    if not identifier:
        return None
    made = CimObject(identifier, _local(element.tag))
    for child in element:
        resource = child.get(f"{_RDF}resource")
        made.values[_local(child.tag)] = (child.text or "").strip() if resource is None else _reference(resource)
    return made


def _local(tag: str) -> str:
    return tag.rpartition("}")[2]


def _reference(text: str) -> str:
    # An enumeration is an address with a fragment (…#LimitTypeKind.patl), an object a fragment or a URN.
    return text.rpartition("#")[2] if "://" in text else _identifier(text)


def _identifier(text: str) -> str:
    return text.strip().removeprefix("urn:uuid:").rpartition("#")[2].removeprefix("_")
