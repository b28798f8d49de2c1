"""A reader of TIFF files for the tests, with nothing but the specification: no GDAL."""

import struct
from dataclasses import dataclass
from xml.etree import ElementTree

#: What the types of TIFF 6.0 are to `struct`: BYTE, ASCII, SHORT, LONG, DOUBLE.
FORMATS = {1: "B", 2: "s", 3: "H", 4: "I", 12: "d"}


@dataclass(frozen=True)
class Tiff:
    """A classic TIFF file, read with nothing but its specification (TIFF 6.0)."""

    data: bytes

    @property
    def order(self) -> str:
        return {b"II": "<", b"MM": ">"}[self.data[:2]]

    def unpack(self, layout: str, at: int) -> tuple:
        return struct.unpack_from(self.order + layout, self.data, at)

    @property
    def magic(self) -> int:
        return self.unpack("H", 2)[0]

    @property
    def directories(self) -> list[int]:
        """Offsets of all image file directories."""
        found, at = [], self.unpack("I", 4)[0]
        while at:
            found.append(at)
            (n_entries,) = self.unpack("H", at)
            (at,) = self.unpack("I", at + 2 + 12 * n_entries)
        return found

    def _fields(self, directory: int):
        """Tag, type, count, layout and offset of the values of each entry."""
        (n_entries,) = self.unpack("H", directory)
        for at in range(directory + 2, directory + 2 + 12 * n_entries, 12):
            tag, kind, count = self.unpack("HHI", at)
            layout = f"{count}{FORMATS[kind]}"
            inside = struct.calcsize(self.order + layout) <= 4
            yield tag, kind, count, layout, at + 8 if inside else self.unpack("I", at + 8)[0]

    def entries(self, directory: int) -> list[tuple[int, int, int, tuple]]:
        """Tag, type, count and values of each entry."""
        return [(tag, kind, count, self.unpack(layout, at)) for tag, kind, count, layout, at in self._fields(directory)]

    def end_of_directory(self, directory: int) -> int:
        """Offset of the first byte after a directory and all values that its entries point to."""
        (n_entries,) = self.unpack("H", directory)
        ends = [at + struct.calcsize(self.order + layout) for *_, layout, at in self._fields(directory)]
        return max(directory + 2 + 12 * n_entries + 4, *ends)

    @property
    def tags(self) -> dict[int, tuple]:
        """Values of the first directory's tags."""
        return {tag: values for tag, _, _, values in self.entries(self.directories[0])}

    @property
    def metadata(self) -> dict[tuple[str, int | None], str]:
        """Items of the metadata tag 42112 by name and band (None for the whole file)."""
        root = ElementTree.fromstring(self.tags[42112][0].rstrip(b"\0"))
        return {
            (
                item.get("role", item.get("name")),
                int(item.get("sample")) if item.get("sample") else None,
            ): item.text
            for item in root
        }
