"""Files become micrographs: one module a file format."""

from fringespan.reading.picture_file import read

__all__ = ["read"]
