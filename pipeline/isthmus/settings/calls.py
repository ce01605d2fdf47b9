"""`[log]` of kind "calls": records of calls and texts, as a telephone network's charging writes them."""

from __future__ import annotations

from typing import Literal, Self

from pydantic import Field, model_validator

from isthmus.settings.log import PATH
from isthmus.settings.section import Section, column, file_key, key

__all__ = ["CallsColumns", "CallsLog", "CallsRules", "plain"]

Handling = Literal["leave out", "keep"]


# From 3GPP TS 32.298, in small letters as exports write them: callingNumber, calledNumber, answerTime or seizureTime,
# callDuration, recordType, callReference. Common practice, in no standard by these names: call_type, disposition,
# serving_country, conference_id.
class CallsColumns(Section):
    """Our name = the log's own column name."""

    sender: str = column("calling_number", "string integer", "who called or wrote (3GPP: callingNumber)")
    receiver: str = column("called_number", "string integer", "who was called or written to (3GPP: calledNumber)")
    time: str = column(
        "start_time", "timestamp date", "when: answered, or else set up (3GPP: answerTime, seizureTime); UTC"
    )
    duration: str = column(
        "duration",
        "number integer",
        "how long they spoke, in seconds (3GPP: callDuration); empty: unknown, only `disposition` tells unanswered",
        optional=True,
    )
    service: str = column(
        "call_type",
        "string integer",
        "call or text, in the words of rules.call_types and text_types; empty: all are what rules.count says",
        optional=True,
    )
    record_type: str = column(
        "record_type",
        "string integer",
        "whose record: originating, terminating, forwarded (3GPP: recordType); empty: unknown",
        optional=True,
    )
    call_reference: str = column(
        "call_reference",
        "string integer",
        "the same in all records of one call (3GPP: networkCallReference); empty: parties, start and duration tell",
        optional=True,
    )
    disposition: str = column(
        "disposition",
        "string integer",
        "how it ended, in the words of rules.unanswered_causes and voicemail_causes; empty: unknown",
        optional=True,
    )
    redirecting: str = column("", "string integer", "who forwarded the call, null if nobody did; empty: no such column")
    country: str = column(
        "",
        "string",
        "country of the serving network (ISO 3166-1, two letters), whose national form the numbers are in; "
        "empty: rules.default_country",
    )
    conference: str = column(
        "", "string integer", "the conference a leg belongs to, null if none; empty: no such column"
    )


class CallsRules(Section):
    """What counts. All thresholds are defaults of this project; only the 15 digits of a number are a standard's."""

    default_country: str = key(
        "",
        "country of national forms where the row tells none (ISO 3166-1, two capitals); empty: they are refused",
        pattern="^([A-Z]{2})?$",
    )
    count: Literal["calls", "texts", "both"] = key("calls", "which contacts count; the others are left out by name")
    mutual: Literal["none", "calls", "all"] = key(
        "none",
        "what counts as two contacts, one each way, for a directed graph; with graph.directed = false leave it at none",
    )
    call_types: list[str] = key(["call", "voice"], "`service` of calls; case, - and _ do not matter, here and below")
    text_types: list[str] = key(["text", "sms"], "`service` of texts")
    originating_types: list[str] = key(
        ["originating", "mo", "mocallrecord", "mosmsrecord"], "`record_type` written on the caller's side"
    )
    terminating_types: list[str] = key(
        ["terminating", "mt", "mtcallrecord", "mtsmsrecord"], "`record_type` written on the called party's side"
    )
    forwarded_types: list[str] = key(["forwarded", "forwarding", "cf"], "`record_type` of a leg to a forwarding target")
    unanswered_causes: list[str] = key(
        ["no answer", "unanswered", "busy", "failed", "cancelled", "congestion"], "`disposition` of calls nobody took"
    )
    voicemail_causes: list[str] = key(["voicemail"], "`disposition` of calls that a machine took")
    least_seconds: int = key(1, "shorter calls count as unanswered; a null duration is 0", "seconds", ge=0)
    longest_seconds: int = key(
        86_400, "a longer duration cannot be, and the contact is refused", "seconds", ge=1, le=10**9
    )
    unanswered: Handling = key("leave out", "calls that nobody took")
    voicemail: Handling = key("leave out", "calls that a voicemail took, by disposition or by rules.numbers")
    forwarded: Literal["leave out", "from forwarder", "as caller"] = key(
        "leave out", "a forwarded leg shows no choice of the caller's; or a contact of who forwarded, or of who called"
    )
    conference: Handling = key("leave out", "legs to a conference bridge, which show no pair")
    short_codes: Handling = key("leave out", "contacts of a short code: services, helplines, emergency calls")
    machines: Handling = key("leave out", "contacts of numbers that rules.numbers calls machines")
    short_code_digits: int = key(
        6,
        "numbers of 3 to this many digits are short codes, if not whole numbers of their country",
        "digits",
        ge=3,
        le=6,
    )
    numbers: str = file_key(
        "",
        "CSV or Parquet of special numbers: number, role (voicemail, conference or machine), label; empty: none",
    )
    leg_slack: int = key(
        2,
        "two records without reference are of one call if start and duration differ by this much at most",
        "seconds",
        ge=0,
        le=60,
    )
    dialler_receivers: int = key(
        200, "who calls at least so many in the window may be a dialler; 0: nobody is", "parties", ge=0
    )
    dialler_back: float = key(
        0.02, "and is one when at most this share of them ever calls back", "share of parties", ge=0, le=1
    )


class CallsLog(Section):
    """Where the rows come from."""

    path: str = file_key(..., PATH, min_length=1)
    kind: Literal["calls"] = key("calls", "how the rows are to be understood")
    columns: CallsColumns = Field(default_factory=CallsColumns)
    rules: CallsRules = Field(default_factory=CallsRules)

    @model_validator(mode="after")
    def _agrees(self) -> Self:
        rules, columns = self.rules, self.columns
        if rules.count == "both" and not columns.service:
            raise ValueError(
                'log.rules.count = "both", but log.columns.service is empty, so nothing tells calls from texts; '
                "name that column, or count calls or texts"
            )
        if rules.forwarded == "from forwarder" and not columns.redirecting:
            raise ValueError(
                'log.rules.forwarded = "from forwarder", but log.columns.redirecting is empty, so nobody knows who '
                'forwarded; name that column, or say "leave out"'
            )
        if rules.mutual != "none" and rules.dialler_receivers:
            raise ValueError(
                f'log.rules.mutual = "{rules.mutual}" makes everybody call back, so that '
                f"log.rules.dialler_receivers = {rules.dialler_receivers} would find nobody; set it to 0, or mutual to "
                '"none" with graph.directed = false'
            )
        for names in (
            ("call_types", "text_types"),
            ("originating_types", "terminating_types", "forwarded_types"),
            ("unanswered_causes", "voicemail_causes"),
        ):
            words = [word for name in names for word in {plain(word) for word in getattr(rules, name)}]
            if twice := sorted({word for word in words if words.count(word) > 1}):
                raise ValueError(
                    f"log.rules: {twice[0]!r} stands in more than one of {', '.join(names)}; leave it in one"
                )
        return self

    @property
    def has_amounts(self) -> bool:
        return True


def plain(word: str) -> str:
    """A word of a log's own vocabulary as it is compared: case, - and _ do not matter."""
    return word.strip().lower().replace("_", " ").replace("-", " ")
