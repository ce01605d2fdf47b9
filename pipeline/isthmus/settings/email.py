"""`[log]` of kind "email": who wrote to whom, from the headers of messages or a server's log of deliveries."""

from __future__ import annotations

from typing import Literal

from pydantic import Field, model_validator

from isthmus.settings.log import PATH
from isthmus.settings.section import Section, column, file_key, key

__all__ = ["EmailColumns", "EmailLog", "EmailRules", "Listed"]

Filter = Literal["leave out", "keep"]
Listed = Literal["to", "cc", "bcc"]

# Local parts that nobody reads or that programs write from. postmaster is a role in RFC 2142, but sends the bounces.
MACHINES = [
    *("no-reply", "noreply", "do-not-reply", "mailer-daemon", "postmaster", "daemon", "root", "cron"),
    *("bounce", "bounces", "auto-reply", "autoreply", "notification", "notifications", "alert", "alerts"),
]
# The mailboxes of RFC 2142 (sections 3 to 5), and what offices commonly call theirs.
ROLES = [
    *("info", "marketing", "sales", "support", "abuse", "noc", "security", "hostmaster", "usenet", "news"),
    *("webmaster", "www", "uucp", "ftp"),
    *("admin", "billing", "contact", "enquiries", "hello", "help", "helpdesk", "hr", "it", "jobs", "office"),
    *("orders", "press", "reception", "service", "team"),
]


class EmailColumns(Section):
    """Our name = the log's own (RFC 5322). Map `recipients`, or `to`, `cc` and `bcc`, or `receiver`, one a row."""

    sender: str = column("from", "string", "who wrote (From): an address, with or without a display name")
    time: str = column(
        "date", "timestamp date", "when (Date): a timestamp of any unit or zone, or a date; without a zone it is UTC"
    )
    recipients: str = column("", "strings string", "all recipients of a message, as a list or as a header's text")
    to: str = column("", "strings string", "recipients under To, as a list or as a header's text")
    cc: str = column("", "strings string", "recipients under Cc, as a list or as a header's text")
    bcc: str = column("", "strings string", "recipients under Bcc, as a list or as a header's text")
    receiver: str = column("", "string", "the one recipient that the row is about")
    message_id: str = column("", "string", "Message-ID, by which a message delivered twice counts once")
    subject_hash: str = column("", "string integer", "hash of the subject; tells messages without Message-ID apart")
    size: str = column("", "integer", "length of the message; tells messages without Message-ID apart")
    return_path: str = column("", "string", "Return-Path; <> or empty text is a machine's, null is not told")
    auto_submitted: str = column("", "string", "Auto-Submitted (RFC 3834)")
    list_id: str = column("", "string boolean", "List-Id (RFC 2919), or whether there is one")
    list_unsubscribe: str = column("", "string boolean", "List-Unsubscribe (RFC 2369), or whether there is one")
    precedence: str = column("", "string", "Precedence; bulk, list and junk are bulk mail")


class EmailRules(Section):
    """What counts as a contact. Defaults are this project's where no standard is named."""

    count: list[Listed] = key(["to", "cc", "bcc"], "which of the columns to, cc and bcc name recipients", min_length=1)
    recipient_cap: int = key(
        50, "a message to more recipients is an announcement and left out; 0: no limit", "recipients", ge=0
    )
    worth: Literal["message", "share"] = key(
        "message",
        "what a contact adds to its tie: message = 1; share = 1 / its readable recipients, the sender not among them",
    )
    content_hash: bool = key(
        True,
        "without Message-ID, contacts alike in sender, receiver, time, subject_hash and size are one; false: each "
        "counts, which is right where times are dates",
    )
    internal: list[str] = key([], "the organisation's own domains, subdomains included")
    contacts: Literal["all", "one internal", "both internal"] = key(
        "all", "how many sides of a contact must be internal"
    )
    plus_tags: list[str] = key(
        [], 'domains whose mailboxes ignore what follows a + (RFC 5233), so that it is cut off; "*": every domain'
    )
    dots: list[str] = key([], 'domains whose mailboxes ignore dots before the @, so that they are left out; "*": every')
    bulk: Filter = key("leave out", "messages with List-Id, List-Unsubscribe or Precedence: bulk, list or junk")
    automatic: Filter = key(
        "leave out",
        "messages from machines: Return-Path <>, Auto-Submitted, or a name of `machines`; and those to them",
    )
    machines: list[str] = key(MACHINES, "local parts of machines, whatever -, _ and . are in them")
    roles: list[str] = key(ROLES, "local parts of role mailboxes, which are kept and marked; RFC 2142 and common ones")
    bulk_receivers: int = key(
        100,
        "a sender to this many receivers in the window, almost unanswered, is a bulk sender; 0: off",
        "parties",
        ge=0,
    )
    bulk_answered: float = key(
        0.02, "almost unanswered: at most this share of its receivers wrote back", "share of receivers", ge=0, le=1
    )
    bulk_behaviour: Filter = key("leave out", "all ties of bulk senders that were found by `bulk_receivers`")
    aliases: str = file_key(
        "",
        "CSV or Parquet file with columns address, person, from, to: whose address it was, first and last day "
        "included; empty days: open; empty: no table",
    )


class EmailLog(Section):
    """Where the rows come from."""

    path: str = file_key(..., PATH, min_length=1)
    kind: Literal["email"] = key("email", "how the rows are to be understood")
    columns: EmailColumns = Field(default_factory=EmailColumns)
    rules: EmailRules = Field(default_factory=EmailRules)

    @model_validator(mode="after")
    def _possible(self) -> EmailLog:
        columns, rules = self.columns, self.rules
        headers = [name for name in ("to", "cc", "bcc") if getattr(columns, name)]
        layouts = [name for name in ("recipients", "receiver") if getattr(columns, name)]
        layouts += [" and ".join(headers)] if headers else []
        if len(layouts) != 1:
            told = f"{', '.join(layouts)} are set" if layouts else "none is set"
            raise ValueError(
                f"log.columns: {told}, but a log has one layout; name the column of `recipients`, or those of `to`, "
                "`cc` and `bcc`, or that of `receiver`"
            )
        if headers and not set(headers) & set(rules.count):
            raise ValueError(
                f"log.rules.count = {rules.count}: none of them is a column of this log ("
                f"{', '.join(headers)}); name one"
            )
        if rules.contacts != "all" and not rules.internal:
            raise ValueError(
                f'log.rules.contacts = "{rules.contacts}", but log.rules.internal is empty; name the '
                "organisation's domains"
            )
        return self

    @property
    def has_amounts(self) -> bool:
        return True
