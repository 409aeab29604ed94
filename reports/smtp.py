"""Handing one message to the mail server, or keeping it as a file where there is none.

Errors of the server are sorted into two kinds, because they are treated differently:

    MailError
    ├── MailDelayedError   try again later (server away, busy, login refused, recipient deferred)
    └── MailRefusedError   the server will never take this message for this recipient
"""

from __future__ import annotations

import os
import smtplib
import ssl
from dataclasses import dataclass
from pathlib import Path

from config.settings import MailSettings

_DEFAULT_PORTS = {"starttls": 587, "tls": 465, "none": 25}


class MailError(Exception):
    """A message was not delivered."""


class MailDelayedError(MailError):
    """Not now; the same message may go through later."""


class MailRefusedError(MailError):
    """Never: the server refused this message or this recipient for good."""


@dataclass(frozen=True)
class Carrier:
    """How messages leave: the settings, the folder for kept ones, the password if any."""

    settings: MailSettings
    folder: Path
    password: str | None = None

    def __repr__(self) -> str:
        """Without the password: this may end up in a log."""
        return f"Carrier({self.settings.host or self.folder})"

    def deliver(self, message: bytes, recipient: str, name: str) -> None:
        """Deliver one message to one recipient.

        Parameters
        ----------
        message : the complete message, headers and body.
        recipient : envelope address.
        name : name of the file when there is no server; the same name is the same message.

        Raises
        ------
        MailDelayedError, MailRefusedError
        """
        if self.settings.host is None:
            self._keep(message, name)
        else:
            self._send(message, recipient)

    def _keep(self, message: bytes, name: str) -> None:
        # Written aside and moved: a reader of the folder never sees half a message, and the
        # same message written again after a crash replaces itself.
        try:
            self.folder.mkdir(parents=True, exist_ok=True)
            part = self.folder / f".{name}.part"
            with part.open("wb") as file:
                file.write(message)
                file.flush()
                os.fsync(file.fileno())
            part.replace(self.folder / f"{name}.eml")
        except OSError as error:
            raise MailDelayedError(
                f"cannot write to the mail folder {self.folder}: {error.strerror}; "
                "mend its permissions or free space"
            ) from error

    def _send(self, message: bytes, recipient: str) -> None:
        try:
            with self._connect() as server:
                if self.settings.user is not None:
                    server.login(self.settings.user, self.password or "")
                server.sendmail(self.settings.sender, [recipient], message)
        except UnicodeEncodeError:
            raise MailDelayedError(
                "the SMTP user or password has characters outside ASCII, which the login cannot "
                "send; set another YELLOWBAY_SMTP_PASSWORD"
            ) from None
        except smtplib.SMTPRecipientsRefused as error:
            code, text = next(iter(error.recipients.values()))
            raise _sorted(code, text, f"recipient {recipient}") from None
        except smtplib.SMTPAuthenticationError as error:
            raise MailDelayedError(
                f"the mail server refused the login of {self.settings.user!r} "
                f"({error.smtp_code}); check mail.user and YELLOWBAY_SMTP_PASSWORD"
            ) from None
        except smtplib.SMTPResponseException as error:
            raise _sorted(error.smtp_code, error.smtp_error, "message") from None
        except ssl.SSLCertVerificationError as error:
            raise MailDelayedError(
                f"the certificate of {self._where} is not trusted ({error.verify_message}); "
                "set mail.ca_file to the certificate of your authority"
            ) from None
        except (smtplib.SMTPException, OSError) as error:
            reason = str(error) or type(error).__name__
            raise MailDelayedError(
                f"the mail server {self._where} is not to be reached: {reason}"
            ) from None

    @property
    def _where(self) -> str:
        return f"{self.settings.host}:{self._port}"

    @property
    def _port(self) -> int:
        return self.settings.port or _DEFAULT_PORTS[self.settings.security]

    def _connect(self) -> smtplib.SMTP:
        settings = self.settings
        host, timeout = settings.host or "", settings.timeout_seconds
        if settings.security == "none":
            return smtplib.SMTP(host, self._port, timeout=timeout)
        context = ssl.create_default_context(cafile=settings.ca_file)
        if settings.security == "tls":
            return smtplib.SMTP_SSL(host, self._port, timeout=timeout, context=context)
        server = smtplib.SMTP(host, self._port, timeout=timeout)
        try:
            server.starttls(context=context)
        except BaseException:
            server.close()
            raise
        return server


def _sorted(code: int, text: bytes | str, what: str) -> MailError:
    # RFC 5321, 4.2.1: 4yz is a transient, 5yz a permanent refusal.
    shown = text.decode("utf-8", "replace") if isinstance(text, bytes) else text
    shown = " ".join(shown.split())
    if 500 <= code < 600:
        return MailRefusedError(f"the mail server refused the {what}: {code} {shown}")
    return MailDelayedError(f"the mail server put off the {what}: {code} {shown}")
