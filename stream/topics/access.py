"""Settings of a topic feed come in; TLS context, user and password go out, read late."""

from __future__ import annotations

import os
import ssl
from collections.abc import Mapping
from pathlib import Path
from typing import Any

from stream.errors import BadSettings, BedloadError, FileTrouble, InputMissing, NoPermission
from stream.settings import Settings

__all__ = ["Hidden", "Secrets"]


class Hidden(str):
    """A text that shows itself to nobody who prints or logs what holds it."""

    __slots__ = ()

    def __repr__(self) -> str:
        return "'***'"


class Secrets:
    """Where the certificates and the password of `settings.feed` are. Nothing secret is kept in it."""

    def __init__(self, settings: Settings, environ: Mapping[str, str] = os.environ) -> None:
        self._feed = settings.feed
        self._resolve = settings.resolve
        self._environ = environ

    def __repr__(self) -> str:
        return "Secrets(***)"

    def options(self) -> dict[str, Any]:
        """What the client needs to speak to the brokers, read anew, so that a changed password counts.

        Raises InputMissing, NoPermission, FileTrouble or BadSettings, naming the place and never the secret.
        """
        feed = self._feed
        protocol = ("SASL_" if feed.sasl else "") + ("SSL" if feed.tls else "PLAINTEXT")
        options: dict[str, Any] = {"security_protocol": protocol}
        if feed.tls:
            options["ssl_context"] = self._context()
        if feed.sasl:
            options["sasl_mechanism"] = feed.sasl
            options["sasl_plain_username"] = feed.username
            options["sasl_plain_password"] = self._password()
        return options

    def _context(self) -> ssl.SSLContext:
        feed = self._feed
        ca_file = None if feed.ca_file is None else self._file("ca_file", feed.ca_file)
        try:
            context = ssl.create_default_context(cafile=ca_file)
        except ssl.SSLError as error:
            raise BadSettings(f"feed.ca_file: {ca_file} holds no PEM certificate ({error.reason})") from None
        context.minimum_version = ssl.TLSVersion.TLSv1_2
        if feed.cert_file is not None and feed.key_file is not None:
            cert_file = self._file("cert_file", feed.cert_file)
            key_file = self._file("key_file", feed.key_file)
            try:
                context.load_cert_chain(cert_file, key_file, password=_no_password)
            except (ssl.SSLError, _Encrypted) as error:
                raise BadSettings(
                    f"feed.cert_file, feed.key_file: {cert_file} and {key_file} are no PEM certificate and "
                    f"its key without a password ({getattr(error, 'reason', None) or error})"
                ) from None
        return context

    def _password(self) -> Hidden:
        feed = self._feed
        if feed.password_variable is not None:
            password = self._environ.get(feed.password_variable, "")
            where = f"feed.password_variable: the environment variable {feed.password_variable}"
        else:
            assert feed.password_file is not None
            path = self._file("password_file", feed.password_file)
            try:
                password = path.read_text("utf-8").partition("\n")[0].removesuffix("\r")
            except UnicodeDecodeError:
                raise BadSettings(f"feed.password_file: {path} is not UTF-8") from None
            where = f"feed.password_file: the first line of {path}"
        if not password:
            raise BadSettings(f"{where} is empty or missing; put the password of {feed.username} there")
        return Hidden(password)

    def _file(self, key: str, name: str) -> Path:
        """The path of a file that can be read."""
        path = self._resolve(name)
        try:
            path.open("rb").close()
        except OSError as error:
            kinds: dict[type[OSError], type[BedloadError]] = {
                FileNotFoundError: InputMissing,
                PermissionError: NoPermission,
            }
            kind = kinds.get(type(error), FileTrouble)
            raise kind(
                f"feed.{key}: {path} cannot be read ({error.strerror}); check path and rights"
            ) from None
        return path


class _Encrypted(Exception):
    pass


def _no_password() -> str:
    raise _Encrypted("the key has a password")
