"""The trial's own mail server and endpoint: real ones, on this machine only, that keep what they receive."""

from __future__ import annotations

import json
import smtplib
import socket
import ssl
import stat
from email.message import EmailMessage

import pytest
import requests

from watcher.trial.servers import chat_endpoint, mail_server, make_certificate


@pytest.fixture(scope="module")
def certificate(tmp_path_factory):
    return make_certificate(tmp_path_factory.mktemp("tls"))


def mail(subject="Hello", **headers):
    one = EmailMessage()
    one["From"], one["To"], one["Subject"] = "gapbell@plant.example", "qa@plant.example", subject
    for key, value in headers.items():
        one[key.replace("_", "-")] = value
    one.set_content(".a line that begins with a dot\nmore\n")
    return one


def test_the_mail_server_wants_tls_and_a_login_and_keeps_the_very_bytes(tmp_path, certificate):
    trusting = ssl.create_default_context(cafile=certificate[0])
    with (
        mail_server(tmp_path, certificate, username="gapbell", password="only-here") as port,
        smtplib.SMTP("127.0.0.1", port, "test", timeout=5) as session,
    ):
        session.ehlo()
        assert session.has_extn("starttls")
        assert session.mail("x@plant.example")[0] == 530  # RFC 3207: STARTTLS first
        session.starttls(context=trusting)
        session.ehlo()
        assert session.mail("x@plant.example")[0] == 530  # RFC 4954: a login first
        with pytest.raises(smtplib.SMTPAuthenticationError, match="535"):
            session.login("gapbell", "wrong")
        session.login("gapbell", "only-here")
        session.send_message(mail(Gapbell_Kind="../alert", Gapbell_Alert="A-000001"))
        session.send_message(mail())
    names = sorted(p.name for p in tmp_path.iterdir())
    assert names == ["001-___alert-A-000001-qa.eml", "002-mail-qa.eml"]
    raw = (tmp_path / names[1]).read_bytes()
    assert b"\r\n\r\n.a line that begins with a dot\r\nmore\r\n" in raw


def test_a_second_run_adds_to_what_the_first_one_kept(tmp_path, certificate):
    trusting = ssl.create_default_context(cafile=certificate[0])
    for _ in range(2):
        with (
            mail_server(tmp_path, certificate, username="a", password="b") as port,
            smtplib.SMTP("localhost", port, "test", timeout=5) as session,
        ):
            session.starttls(context=trusting)
            session.login("a", "b")
            session.send_message(mail())
        with chat_endpoint(tmp_path) as url:
            assert (
                requests.post(url, json={"text": "æ"}, headers={"webhook-id": "m-1"}, timeout=5).status_code
                == 204
            )
    assert sorted(p.name for p in tmp_path.iterdir()) == [
        "001-mail-qa.eml",
        "001.json",
        "002-mail-qa.eml",
        "002.json",
    ]
    kept = json.loads((tmp_path / "002.json").read_text(encoding="utf-8"))
    assert kept["body"] == {"text": "æ"}
    assert kept["headers"]["webhook-id"] == "m-1"


def test_both_listen_on_this_machine_alone_and_are_gone_afterwards(tmp_path, certificate):
    with (
        mail_server(tmp_path, certificate, username="a", password="b") as port,
        chat_endpoint(tmp_path) as url,
    ):
        assert url.startswith("http://127.0.0.1:")
        ports = [port, int(url.rsplit(":", 1)[1].split("/")[0])]
    for gone in ports:
        with pytest.raises(ConnectionRefusedError):
            socket.create_connection(("127.0.0.1", gone), 1)


def test_the_key_is_readable_by_its_owner_alone(certificate):
    assert stat.S_IMODE(certificate[1].stat().st_mode) == 0o600
