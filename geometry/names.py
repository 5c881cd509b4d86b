"""What names may look like: they go into tables, file names and other systems."""

from __future__ import annotations

from typing import Annotated, Final

from pydantic import Field

# Letters, digits and a few signs, at most 64.
NAME_PATTERN: Final = r"^[A-Za-z0-9][A-Za-z0-9 _.+-]{0,63}$"
Name = Annotated[str, Field(pattern=NAME_PATTERN)]
