"""Where a file comes from, and what it must not be taken for."""

from __future__ import annotations

import os
from collections.abc import Mapping
from dataclasses import dataclass
from datetime import UTC, datetime
from typing import Any

from stillground.errors import ConfigError
from stillground.protocols import Result

CAUTION = (
    "A reconstruction is no clearance to dig, drill or load: confirm it by direct investigation. "
    "Local codes and licensed practice decide."
)


@dataclass(frozen=True)
class Provenance:
    """What made a file, for its global attributes.

    Parameters
    ----------
    title : str
    config_text : str
        The run's whole configuration, as written.
    command : str
        The command line, without machine paths that nobody else has.
    inputs : mapping of file name to SHA-256
        Hexadecimal digests of all files read.
    versions : mapping of package name to version
        ``stillground`` among them.
    created : datetime
        From `timestamp`.
    cautions : str
        What to mind in this run, beside `CAUTION`; may be empty.
    """

    title: str
    config_text: str
    command: str
    inputs: Mapping[str, str]
    versions: Mapping[str, str]
    created: datetime
    cautions: str

    def attributes(self, summary: str) -> dict[str, str]:
        """Global attributes after CF-1.8 and ACDD-1.3; ``summary`` says what the file holds."""
        when = self.created.astimezone(UTC).strftime("%Y-%m-%dT%H:%M:%SZ")
        program = f"stillground {self.versions.get('stillground', '')}".strip()
        return {
            "Conventions": "CF-1.8, ACDD-1.3",
            "title": self.title,
            "summary": summary,
            "source": f"geophysical measurements reconstructed by {program}",
            "history": f"{when} {self.command}",
            "creator_name": program,
            "date_created": when,
            "license": "not stated: the owner of the survey decides",
            "comment": f"{CAUTION} {self.cautions}".strip(),
            "configuration": self.config_text,
            "package_versions": ", ".join(f"{name} {number}" for name, number in self.versions.items()),
            "input_sha256": "\n".join(f"{digest}  {name}" for name, digest in self.inputs.items()),
        }


def argument(result: Result) -> dict[str, Any]:
    """Global attributes that argue an answer: which rule stopped it where, and what the grid does to it.

    ``order`` is left out where it cannot be told. Of a nonlinear measurement ``chosen_chi_square`` is on the
    last linearisation, ``chosen_chi_square_recomputed`` the answer's own, and ``start_dependence`` tells by
    what part other starts move the answer, as text.
    """
    chosen, verdict = result.chosen, result.ladder.verdict
    said: dict[str, Any] = {
        "chosen_rule": chosen.rule,
        "chosen_iteration": chosen.iteration,
        "chosen_chi_square": chosen.chi_square,
        "verdict": verdict.word,
        "verdict_reason": verdict.reason,
    }
    if verdict.order is not None:
        said["order"] = verdict.order
    if chosen.chi_square_recomputed is not None:
        said["chosen_chi_square_recomputed"] = chosen.chi_square_recomputed
    if result.start_dependence:
        moved = result.start_dependence.items()
        said["start_dependence"] = ", ".join(f"{name}: {part:.3g}" for name, part in moved)
    return said


def timestamp() -> datetime:
    """The time to write into files: SOURCE_DATE_EPOCH where it is set, else now, in UTC.

    Raises
    ------
    ConfigError
        When SOURCE_DATE_EPOCH is not a whole number of seconds.
    """
    text = os.environ.get("SOURCE_DATE_EPOCH")
    if text is None:
        return datetime.now(UTC).replace(microsecond=0)
    try:
        return datetime.fromtimestamp(int(text), UTC)
    except (ValueError, OverflowError, OSError) as error:
        raise ConfigError(
            f"the environment variable SOURCE_DATE_EPOCH is {text!r}: "
            f"give whole seconds since 1970-01-01, or unset it"
        ) from error
