"""The one kind of exception that means: what the user gave is wrong. The command line turns it into exit status 2."""

from pathlib import Path


def printable(text: object, longest: int = 160) -> str:
    """Text that came from a file, safe to show on a terminal: control characters replaced, long text cut."""
    shown = "".join(c if c.isprintable() else "?" for c in str(text))
    return shown if len(shown) <= longest else shown[: longest - 1] + "…"


class InputFault(Exception):
    """One fault in something the user gave: the file, the place in it, what is wrong, what to do about it."""

    def __init__(self, file: str | Path, place: str, fault: str, remedy: str) -> None:
        self.file, self.place, self.fault, self.remedy = printable(file, 300), printable(place), fault, remedy
        super().__init__(self.line)

    @property
    def line(self) -> str:
        """The fault as one line."""
        at = f"{self.file}: {self.place}" if self.place else self.file
        return printable(f"{at}: {self.fault}; {self.remedy}", 600)


class InputFaults(Exception):
    """Several faults found in one reading."""

    def __init__(self, faults: list[InputFault]) -> None:
        self.faults = tuple(faults)
        super().__init__("\n".join(fault.line for fault in faults))
