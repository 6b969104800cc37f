"""What is to be done: each recording held against what the catalogue knows of it."""

from __future__ import annotations

import json
import time
from collections.abc import Iterable, Iterator
from dataclasses import dataclass, replace
from enum import Enum
from pathlib import Path
from typing import Any

from spatiq.batch.catalogue import Catalogue
from spatiq.batch.identity import (
    Content,
    Fingerprint,
    files_of,
    fingerprint,
    link_identity,
    options_identity,
)
from spatiq.batch.inputs import Item
from spatiq.batch.rules import Choice, Rules
from spatiq.batch.work import Job
from spatiq.errors import InputError
from spatiq.link.loading import load_link
from spatiq.receiver.options import ReceiverOptions
from spatiq.recording.recording import Recording
from spatiq.results.provenance import sha256_text


class State(Enum):
    """What becomes of a recording; the values stand in the catalogue."""

    MEASURED = "measured"
    FAILED = "failed"
    GROWING = "growing"
    LEFT_OUT = "left out"
    TO_DO = "to do"


@dataclass(frozen=True)
class Case:
    """A recording, and what is to be done with it.

    Attributes:
        item: the recording.
        state: as seen now.
        reason: why it is not measured.
        look: its files from outside.
        choice: link and options; None when it failed before any could be chosen.
        asked: digest of how it is to be measured.
        content: digests that still hold.
        attempts: times it has failed since it last changed.
        known: the catalogue says all this already.
    """

    item: Item
    state: State
    look: Fingerprint
    reason: str = ""
    choice: Choice | None = None
    asked: str = ""
    content: Content | None = None
    attempts: int = 0
    known: bool = False

    @property
    def name(self) -> str:
        """The recording's name among claims."""
        return self.item.label


@dataclass(frozen=True)
class Terms:
    """What holds for the whole run.

    Attributes:
        folder: of the results.
        rules: which link goes with which recording.
        bound: BER above which a frame counts as out.
        settle_s: a recording changed within so many seconds is taken to be growing.
        retry_failed: try those again that have failed and not changed since.
        verify: compare data with core:sha512.
    """

    folder: Path
    rules: Rules
    bound: float
    settle_s: float
    retry_failed: bool = False
    verify: bool = False

    def job(self, case: Case) -> Job:
        """The job of a case that is to be done."""
        assert case.choice is not None and case.choice.link is not None
        return Job(
            case.item,
            case.choice.link,
            case.choice.options,
            self.folder,
            self.bound,
            self.verify,
            case.content,
        )


class Survey:
    """Looks at recordings; links are read once."""

    def __init__(self, terms: Terms, catalogue: Catalogue) -> None:
        self._terms = terms
        self._catalogue = catalogue
        self._links: dict[Path, str] = {}

    def cases(self, items: Iterable[Item]) -> Iterator[Case]:
        """One case for each item."""
        known = {(r["path"], r["member"]): r for r in self._catalogue.rows(_KNOWN)}
        for item in items:
            yield self.case(item, known.get((str(item.path), item.member)))

    def again(self, case: Case) -> Case:
        """The case once more, by what the catalogue says now."""
        item = case.item
        query = f"{_KNOWN} WHERE path = ? AND member = ?"
        known = self._catalogue.rows(query, [str(item.path), item.member])
        if not known or known[0]["state"] != State.MEASURED.value:
            return case
        return self.case(item, known[0])

    def case(self, item: Item, known: dict[str, Any] | None) -> Case:
        """What is to be done with a recording, of which the catalogue knows `known`."""
        recording: Recording | None = None
        look = Fingerprint("", 0, 0.0)
        fault = item.fault
        try:
            recording = None if fault else item.open()
        except InputError as error:
            fault = str(error)
        try:
            look = fingerprint(files_of(item, recording))
        except InputError as error:
            fault = fault or str(error)
        case = Case(item, State.FAILED, look, fault)
        try:
            choice = self._terms.rules.choice(item, recording)
            if choice.link is None:
                return _settled(replace(case, state=State.LEFT_OUT, reason="a rule says so"), known)
            case = replace(case, choice=choice, asked=self._asked(choice))
        except InputError as error:
            fault = fault or str(error)
        if known is not None and known["fingerprint"] == look.text:
            if known["content"]:
                case = replace(case, content=Content(*known["content"].split()))
            case = replace(case, attempts=known["attempts"])
            same = known["asked"] == case.asked
            done = known["state"] == "measured" and known["results_file"]
            if (
                same
                and not fault
                and done
                and (self._terms.folder / known["results_file"]).is_file()
            ):
                return replace(case, state=State.MEASURED, reason="", known=True)
            if same and known["state"] == "failed" and not self._terms.retry_failed:
                return replace(case, reason=known["reason"], known=True)
        if time.time() - look.newest < self._terms.settle_s:
            return _settled(replace(case, state=State.GROWING, reason=_YOUNG), known)
        if fault:
            failed = replace(case, reason=fault, attempts=case.attempts + 1)
            return failed
        return replace(case, state=State.TO_DO, reason="")

    def _is_there(self, known: dict[str, Any]) -> bool:
        file = known["results_file"]
        return file is not None and (self._terms.folder / file).is_file()

    def _asked(self, choice: Choice) -> str:
        assert choice.link is not None
        if choice.link not in self._links:
            self._links[choice.link] = link_identity(load_link(choice.link))
        return asked(self._links[choice.link], choice.options, self._terms)


_YOUNG = "changed just now: it may still be written"
_KNOWN = (
    "SELECT recordings.*, results_file FROM recordings LEFT JOIN measurements USING (measurement)"
)


def _settled(case: Case, known: dict[str, Any] | None) -> Case:
    """Mark a case as known when the catalogue says the same."""
    same = known is not None and all(
        known[name] == value
        for name, value in (
            ("state", case.state.value),
            ("reason", case.reason),
            ("fingerprint", case.look.text),
        )
    )
    return replace(case, known=same)


def asked(link: str, options: ReceiverOptions, terms: Terms) -> str:
    """Digest of all that decides what the catalogue says of a recording's content."""
    facts = [link, options_identity(options), terms.bound, terms.verify]
    return sha256_text(json.dumps(facts))
