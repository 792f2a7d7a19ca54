"""What a suite of checks found, readable as a table."""

from collections.abc import Callable
from typing import NamedTuple


class Finding(NamedTuple):
    """One property.

    Attributes:
        prop: what was checked.
        outcome: `"passed"`, `"failed"`, `"not claimed"` or `"not checked"`.
        message: what is wrong, or why it was not checked.
    """

    prop: str
    outcome: str
    message: str = ""


class Report(NamedTuple):
    """All findings about one thing; print it, or call `require`.

    Attributes:
        subject: what was checked.
        findings: in the order in which they were made.
    """

    subject: str
    findings: tuple[Finding, ...]

    @property
    def passed(self) -> bool:
        """Nothing failed."""
        return not self.failures

    @property
    def failures(self) -> tuple[Finding, ...]:
        """The findings that failed."""
        return tuple(f for f in self.findings if f.outcome == "failed")

    def require(self) -> None:
        """Raise AssertionError with every failure, if there is one."""
        __tracebackhide__ = True
        if not self.passed:
            raise AssertionError("\n".join(f.message for f in self.failures))

    def __str__(self) -> str:
        """Return the findings as a table."""
        width = max(len(f.prop) for f in self.findings)
        lines = [f"{self.subject}: {'passed' if self.passed else 'FAILED'}"]
        for f in self.findings:
            rest = "\n".ljust(width + 18).join(f.message.splitlines())
            lines.append(f"  {f.prop.ljust(width)}  {f.outcome.ljust(11)}  {rest}".rstrip())
        return "\n".join(lines)


def run(prop: str, check: Callable[[], None]) -> Finding:
    """Run one check; an error of any kind inside the subject is a failure of the property."""
    try:
        check()
    except AssertionError as problem:
        return Finding(prop, "failed", str(problem))
    except Exception as problem:  # the subject's own error, whatever it is
        words = str(problem).strip().splitlines() or [""]
        return Finding(prop, "failed", f"{prop}: raised {type(problem).__name__}: {words[0]}")
    return Finding(prop, "passed")
