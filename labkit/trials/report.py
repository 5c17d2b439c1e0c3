"""What a check of a rule found, for reading in a notebook and in a terminal."""

import textwrap
from dataclasses import dataclass
from html import escape

WIDTH = 100


@dataclass(frozen=True)
class Finding:
    """One fault of a rule: its name, what was seen, and what to do."""

    fault: str
    seen: str
    remedy: str


@dataclass(frozen=True)
class PolicyCheck:
    """What `labkit.check_policy` found.

    Attributes
    ----------
    policy : str
        The name of the rule.
    findings : tuple of Finding
        Its faults, each with `fault`, `seen` and `remedy`; empty when none was found.
    notes : tuple of str
        What is worth knowing and no fault.
    tried : tuple of (str, int)
        The fleets it was tried on, in words, and the tasks there; empty when it could not be tried.
    unseen : tuple of str
        What such a check cannot find.
    sound : bool
        Whether nothing was found.

    Examples
    --------
    >>> import labkit as lk
    >>> @lk.policy
    ... def by_name(options, loads, capacity, coin):
    ...     return "first"
    >>> found = lk.check_policy(by_name)
    >>> found.sound, [finding.fault for finding in found.findings]
    (False, ['cannot be compiled'])
    >>> found.tried
    ()
    """

    policy: str
    findings: tuple[Finding, ...]
    notes: tuple[str, ...]
    tried: tuple[tuple[str, int], ...]
    unseen: tuple[str, ...]

    @property
    def sound(self) -> bool:
        """Whether nothing was found."""
        return not self.findings

    @property
    def _verdict(self) -> str:
        count = len(self.findings)
        faults = "no fault found" if not count else "1 fault found" if count == 1 else f"{count} faults found"
        return f"Rule {self.policy}: {faults}"

    @property
    def _tried_words(self) -> str:
        tasks = sum(count for _, count in self.tried)
        return f"{tasks:,} tasks on {len(self.tried)} fleets, each asked in several ways"

    def __repr__(self) -> str:
        lines = [f"{self._verdict}."]
        for finding in self.findings:
            lines += [
                "",
                f"  {finding.fault}",
                *_wrapped(finding.seen),
                *_wrapped(f"To do: {finding.remedy}"),
            ]
        if self.tried:
            lines += ["", f"Tried: {self._tried_words}."]
            width = max(len(words) for words, _ in self.tried)
            lines += [f"    {words:<{width}}  {count:>5,}" for words, count in self.tried]
        if self.notes:
            lines += ["", "Noted:", *(line for note in self.notes for line in _wrapped(note, "  - "))]
        if self.unseen:
            lines += ["", "Not to be found in this way:"]
            lines += [line for each in self.unseen for line in _wrapped(f"{each}.", "  - ")]
        return "\n".join(lines)

    def _repr_html_(self) -> str:
        parts = [f"<p><strong>{escape(self._verdict)}.</strong></p>"]
        if self.findings:
            rows = "".join(
                f"<tr>{_cell(f.fault, 'th')}{_cell(f.seen)}{_cell(f.remedy)}</tr>" for f in self.findings
            )
            head = "".join(_cell(word, "th") for word in ("fault", "what was seen", "what to do"))
            parts.append(f"<table><thead><tr>{head}</tr></thead><tbody>{rows}</tbody></table>")
        parts += [f"<p>{escape(note)}</p>" for note in self.notes]
        if self.tried:
            items = "".join(f"<li>{escape(words)}: {count:,} tasks</li>" for words, count in self.tried)
            parts.append(
                f"<details><summary>Tried: {escape(self._tried_words)}</summary><ul>{items}</ul></details>"
            )
        if self.unseen:
            items = "".join(f"<li>{escape(each)}</li>" for each in self.unseen)
            parts.append(f"<p>Not to be found in this way:</p><ul>{items}</ul>")
        return "".join(parts)


def _wrapped(text: str, first: str = "    ") -> list[str]:
    return textwrap.wrap(
        text,
        WIDTH,
        initial_indent=first,
        subsequent_indent=" " * len(first),
        break_long_words=False,
        break_on_hyphens=False,
    )


def _cell(text: str, tag: str = "td") -> str:
    style = "text-align: left; vertical-align: top; white-space: normal"
    return f'<{tag} style="{style}">{escape(text)}</{tag}>'
