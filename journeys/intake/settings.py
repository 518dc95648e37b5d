"""Return settings as plain values, TOML files and a call that can be pasted back."""

from __future__ import annotations

import difflib
import re
import tomllib
from collections.abc import Mapping
from dataclasses import fields
from pathlib import Path
from typing import TYPE_CHECKING, Any, ClassVar, Self

from journeys.errors import RulesError
from journeys.intake.frozen import toml_text

_LONGEST = 4 << 20
_DEEPEST = 100
_TOO_DEEP = "its tables or lists lie deeper in one another than any setting has them"


class Settings:
    """What a frozen dataclass of settings gets from and gives to files; its first three fields must be given."""

    __slots__ = ()

    if TYPE_CHECKING:
        __dataclass_fields__: ClassVar[dict[str, Any]]

    @classmethod
    def from_dict(cls, settings: Mapping[str, Any]) -> Self:
        """Return settings from a mapping with the names of the parameters as keys.

        Parameters
        ----------
        settings : mapping

        Returns
        -------
        Self

        Raises
        ------
        RulesError
            If a key is unknown or missing, or a value is wrong.

        Examples
        --------
        >>> from journeys.intake.rules import JourneyRules
        >>> JourneyRules.from_dict({"customer": "who", "time": "when", "event": "what", "silense": "30d"})
        Traceback (most recent call last):
        ...
        journeys.errors.RulesError: 'silense' is no setting of the rules; did you mean 'silence'?
        """
        known = [field.name for field in fields(cls)]
        problems = []
        for name in settings:
            if name not in known:
                close = difflib.get_close_matches(str(name), known, n=1)
                hint = f"did you mean {close[0]!r}?" if close else f"there are {', '.join(known)}"
                problems.append(f"{name!r} is no setting of the rules; {hint}")
        problems += [
            f'{name}: not given; wanted the name of a column, such as {name} = "{name}"'
            for name in known[:3]
            if name not in settings
        ]
        if problems:
            raise RulesError("\n".join(problems))
        return cls(**settings)

    @classmethod
    def from_toml(cls, path: str | Path) -> Self:
        """Return settings from a TOML file with the names of the parameters as keys.

        Parameters
        ----------
        path : str or Path

        Returns
        -------
        Self

        Raises
        ------
        RulesError
            If the file cannot be read, or what it says is wrong.
        """
        file = Path(path)
        settings = read_toml(file, "rules file")
        try:
            return cls.from_dict(settings)
        except RulesError as fault:
            raise RulesError(f"rules file {file}: {fault}") from None

    def to_dict(self) -> dict[str, Any]:
        """Return settings as plain values that JSON can hold; `from_dict` makes equal rules of them.

        Returns
        -------
        dict

        Examples
        --------
        >>> from journeys.intake.rules import JourneyRules
        >>> rules = JourneyRules("who", "when", "what", silence=None, horizons=["7d"])
        >>> JourneyRules.from_dict(rules.to_dict()) == rules
        True
        """
        return {field.name: _plain(getattr(self, field.name)) for field in fields(self)}

    def to_toml(self) -> str:
        """Return settings as the text of a TOML file that `from_toml` makes equal rules of.

        Returns
        -------
        str

        Examples
        --------
        >>> from journeys.intake.rules import JourneyRules
        >>> print(JourneyRules("who", "when", "what", silence=None).to_toml()[:45])
        customer = "who"
        time = "when"
        event = "what"
        """
        return toml_text({name: value for name, value in self._for_toml().items() if value is not None})

    def _for_toml(self) -> dict[str, Any]:
        """Return the settings with None written in words where it means something else than left out."""
        return self.to_dict()

    def __repr__(self) -> str:
        """Write the call that makes it, without the settings left as they come."""
        first = [getattr(self, field.name) for field in fields(self)[:3]]
        standard = type(self)(*first, **self._must_be_said())
        shown = [f"{field.name}={getattr(self, field.name)!r}" for field in fields(self)[:3]]
        for field in fields(self)[3:]:
            value = getattr(self, field.name)
            if field.name in self._must_be_said() or value != getattr(standard, field.name):
                shown.append(f"{field.name}={value!r}")
        return f"{type(self).__name__}({', '.join(shown)})"

    def _must_be_said(self) -> dict[str, Any]:
        """Return settings without a standard, each with a value that will do."""
        return {}


def _plain(value: Any) -> Any:
    """Tuples as lists, mappings as dicts."""
    if isinstance(value, Mapping):
        return {key: _plain(item) for key, item in value.items()}
    return list(value) if isinstance(value, tuple) else value


def read_toml(file: Path, what: str) -> dict[str, Any]:
    """Return what a TOML file says.

    Parameters
    ----------
    file : Path
    what : str
        What the file is, for the message.

    Returns
    -------
    dict

    Raises
    ------
    RulesError
        If it cannot be read.
    """
    try:
        with file.open("rb") as opened:
            written = opened.read(_LONGEST + 1)
        return _parsed(written)
    except OSError as fault:
        raise RulesError(f"{what} {file}: {fault.strerror or 'cannot be read'}") from None
    except RecursionError:
        raise RulesError(f"{what} {file}: {_TOO_DEEP}") from None
    except ValueError as fault:
        # Faults of the text, numbers of thousands of digits, names of files that no file can have.
        raise RulesError(f"{what} {file}: not TOML ({fault})") from None


def _parsed(written: bytes) -> dict[str, Any]:
    """Return the settings in the text of a TOML file; what would take the parser minutes is refused."""
    if len(written) > _LONGEST:
        raise ValueError(f"longer than {_LONGEST >> 20} MiB")
    text = written.decode()
    bare = re.sub(r"\"[^\"\n]*\"|'[^'\n]*'|#.*", "", text)
    if any(line.count(".") > _DEEPEST for line in bare.splitlines()):
        raise ValueError(_TOO_DEEP)
    return tomllib.loads(text.replace("\r\n", "\n"))
