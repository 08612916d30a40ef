"""The error tree: what is wrong, which rule it breaks, what to do instead.

Rules of this file:

- Every error carries its facts as attributes: name, value, unit, rule, remedy.
- ``str(error)`` is what the user sees: lower case, no full stop.
- Every error survives pickling, because parallel work sends errors between processes.
- Nothing here prints or knows exit statuses.
"""

from __future__ import annotations

from dataclasses import dataclass


class Plant2Error(Exception):
    """Root of all errors that are meant for people.

    Parameters
    ----------
    name : str
        What the error is about: a parameter, a key, a file, a tool.
    value : float, str or None
        What came, in `unit`; None where no value belongs to the error.
    unit : str
        Unit of the value; empty where there is none.
    rule : str
        What is allowed, or what went wrong.
    remedy : str
        What to do instead.

    Examples
    --------
    >>> str(Plant2Error("rate", 0.0, "Hz", "must be above 0", "give the sample rate"))
    'rate = 0 Hz: must be above 0; give the sample rate'
    """

    def __init__(
        self, name: str, value: float | str | None, unit: str, rule: str, remedy: str
    ) -> None:
        super().__init__(name, value, unit, rule, remedy)
        self.name, self.value, self.unit = name, value, unit
        self.rule, self.remedy = rule, remedy

    def __str__(self) -> str:
        head = self.name
        if self.value is not None:
            amount = self.value if isinstance(self.value, str) else f"{self.value:.6g}"
            head = f"{head} = {amount} {self.unit}".rstrip()
        text = f"{head}: {self.rule}" if head else self.rule
        return f"{text}; {self.remedy}" if self.remedy else text


class OutOfRangeError(Plant2Error, ValueError):
    """A number lies where the asked result has no meaning."""


class DesignError(Plant2Error):
    """No controller meets what was asked; the remedy names what is within reach."""


class ToolMissingError(Plant2Error):
    """A program that was asked for is not installed.

    Parameters
    ----------
    name : str
        The program.
    rule : str
        What it is needed for.
    remedy : str
        How to get it, or how to do without.

    Examples
    --------
    >>> str(ToolMissingError("gcc", "compiles the emitted files", "install it, or leave out host"))
    'gcc: not found, but it compiles the emitted files; install it, or leave out host'
    """

    def __init__(self, name: str, rule: str, remedy: str) -> None:
        super().__init__(name, None, "", f"not found, but it {rule}", remedy)
        self.args = (name, rule, remedy)


class QuantityError(Plant2Error, ValueError):
    """A text is no "number unit" of the quantity that is wanted.

    Parameters
    ----------
    name : str
        Key or parameter.
    value : str
        What came, as written.
    rule : str
        What is allowed.
    suggestion : str
        The text to write instead, without quotes.

    Examples
    --------
    >>> str(QuantityError("mass", '"48"', "a mass needs its unit", "48 g"))
    'mass = "48": a mass needs its unit; write mass = "48 g"'
    """

    def __init__(self, name: str, value: str, rule: str, suggestion: str) -> None:
        super().__init__(name, value, "", rule, f'write {name} = "{suggestion}"')
        self.suggestion = suggestion
        self.args = (name, value, rule, suggestion)


@dataclass(frozen=True, slots=True, kw_only=True)
class Complaint:
    """One thing that is wrong with a loop file.

    Parameters
    ----------
    table : str
        Table of the key, such as "plant" or "plant.mode.0"; empty where none is concerned.
    key : str
        The key; empty where the whole table or file is concerned.
    came : str
        What came, in TOML notation; empty where something is missing.
    allowed : str
        What is allowed.
    remedy : str
        The line to write instead; empty where no line helps.
    nearest : str
        The known name nearest to an unknown one; empty otherwise.
    """

    table: str = ""
    key: str = ""
    came: str = ""
    allowed: str
    remedy: str = ""
    nearest: str = ""

    @property
    def rule(self) -> str:
        """What is allowed, under the name that errors use."""
        return self.allowed

    def __str__(self) -> str:
        head = " ".join(
            part for part in (f"[{self.table}]" if self.table else "", self.key) if part
        )
        if self.came:
            head = f"{head} = {self.came}" if self.key else f"{head} {self.came}".strip()
        text = f"{head}: {self.allowed}" if head else self.allowed
        return f"{text}; write {self.remedy}" if self.remedy else text


class LoopFileError(Plant2Error):
    """A loop file cannot be used; carries everything that is wrong with it.

    Parameters
    ----------
    complaints : tuple of Complaint
        At least one.
    source : str
        Name of the file; empty when the loop came as text.

    Examples
    --------
    >>> complaint = Complaint(table="check", key="step", allowed="missing", remedy='step = "1 um"')
    >>> str(LoopFileError((complaint,), "loop.toml"))
    'loop.toml: [check] step: missing; write step = "1 um"'
    """

    def __init__(self, complaints: tuple[Complaint, ...], source: str = "") -> None:
        first = complaints[0]
        name = f"{first.table}.{first.key}".strip(".")
        super().__init__(name, first.came, "", first.allowed, first.remedy)
        self.complaints = complaints
        self.source = source
        self.args = (complaints, source)

    def __str__(self) -> str:
        head = f"{self.source}: " if self.source else ""
        if len(self.complaints) == 1:
            return f"{head}{self.complaints[0]}"
        lines = [f"{head}{len(self.complaints)} complaints"]
        return "\n".join(lines + [f"  {complaint}" for complaint in self.complaints])
