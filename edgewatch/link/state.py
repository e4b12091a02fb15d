"""What the MQTT session is doing, in one word for programs and one sentence for people."""

from __future__ import annotations

import socket
import ssl
from dataclasses import dataclass

STATES = ("connecting", "online", "offline", "stopped")

REASONS = {
    "": "nothing is wrong",
    "unreachable": "no broker answers at that host and port",
    "unknown_host": "the broker's host name cannot be resolved",
    "wrong_password": "the broker refuses user name or password",
    "not_authorised": "the broker does not allow this station to connect or to publish",
    "certificate_expired": "the broker's certificate has expired",
    "certificate_not_yet_valid": "the broker's certificate is not valid yet: compare the clocks",
    "certificate_not_trusted": "the broker's certificate is not signed by a trusted authority",
    "certificate_wrong_host": "the broker's certificate is for another host name",
    "tls_failed": "no TLS session comes about",
    "rejected": "the broker rejects the connection",
    "no_answer": "the broker accepts the connection and then does not answer",
    "taken_over": "another client uses the same client identifier",
    "closed": "the connection was closed",
    "too_large": "the broker takes no message as large as the next one",
    "settings": "password, certificate or key cannot be used",
    "journal": "the outbox cannot be read or written",
    "fault": "the session failed and is begun anew",
}
"""Reason -> what it means."""

# OpenSSL's X509_V_ERR_* (x509_vfy.h)
_NOT_YET_VALID, _EXPIRED, _WRONG_HOST, _WRONG_ADDRESS = 9, 10, 62, 64


@dataclass(frozen=True, slots=True, kw_only=True)
class LinkState:
    """``state``: one of ``STATES``; ``reason``: a key of ``REASONS``; ``detail``: one line."""

    state: str
    reason: str = ""
    detail: str = ""


def from_error(error: BaseException) -> LinkState:
    """Translate what connecting raised. The only place where errors of sockets and TLS are told apart."""
    detail = str(getattr(error, "strerror", None) or error) or type(error).__name__
    return LinkState(state="offline", reason=_reason(error), detail=detail.replace("\n", " ")[:300])


def _reason(error: BaseException) -> str:
    if isinstance(error, ssl.SSLCertVerificationError):
        code = getattr(error, "verify_code", 0)
        if code == _EXPIRED:
            return "certificate_expired"
        if code == _NOT_YET_VALID:
            return "certificate_not_yet_valid"
        return "certificate_wrong_host" if code in (_WRONG_HOST, _WRONG_ADDRESS) else "certificate_not_trusted"
    if isinstance(error, ssl.SSLError):
        return "tls_failed"
    if isinstance(error, (socket.gaierror, UnicodeError)):
        return "unknown_host"
    return "unreachable"


def from_reason_code(value: int, text: str) -> LinkState:
    """Translate a reason code of CONNACK, PUBACK or DISCONNECT (MQTT 5 section 2.4; paho maps 3.1.1 to it)."""
    known = {
        0x85: "rejected",
        0x86: "wrong_password",
        0x87: "not_authorised",
        0x8B: "closed",
        0x8C: "wrong_password",
        0x8D: "no_answer",
        0x8E: "taken_over",
        0x95: "too_large",
    }
    return LinkState(state="offline", reason=known.get(value, "rejected"), detail=f"{text} ({value:#04x})")
