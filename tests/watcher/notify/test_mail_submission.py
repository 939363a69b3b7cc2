"""Mail, step by step: what a server may answer at each, and what follows from it."""

from __future__ import annotations

import base64
import time
from email import message_from_bytes, message_from_string, policy

import pytest

from watcher.notify.mail import build_mail, mail_id
from watcher.trial.servers import make_certificate

A, B, C = "qa@plant.example", "lead@plant.example", "shift@plant.example"
PASSWORD = "geheim-Straße-42"
OFFERS_TLS = "250-desk\r\n250 STARTTLS"
OFFERS_LOGIN = "250-desk\r\n250 AUTH PLAIN LOGIN"


@pytest.fixture
def login(monkeypatch):
    monkeypatch.setenv("GAPBELL_PW", "geheim-42")
    return {"username": "gapbell", "password": {"env": "GAPBELL_PW"}}


def answer_for(**by_address):
    """Answer RCPT by what the address begins with."""
    return lambda text, _: next((v for k, v in by_address.items() if f"<{k}" in text), "250 ok")


@pytest.mark.parametrize(
    ("answers", "kind", "accepted", "refused", "said"),
    [
        ({"greeting": "421 4.3.2 closing"}, "later", (), (), "421"),
        ({"greeting": "554 no service"}, "later", (), (), "554"),
        ({"greeting": None}, "later", (), (), "cannot be reached"),
        ({"MAIL": "451 4.3.0 try later"}, "later", (), (), "451"),
        ({"MAIL": "421 too many"}, "later", (), (), "421"),
        ({"MAIL": "553 5.1.8 not you"}, "refused", (), (A, B, C), "sender"),
        ({"MAIL": "530 5.7.0 login first"}, "paused", (), (), "530"),
        ({"RCPT": "451 4.7.1 greylisted"}, "later", (), (), "greylisted"),
        ({"RCPT": "550 5.1.1 unknown"}, "refused", (), (A, B, C), "5.1.1"),
        ({"RCPT": answer_for(lead="550 5.1.1 unknown")}, "sent", (A, C), (B,), "lead@plant.example: 550"),
        ({"RCPT": answer_for(lead="450 4.2.1 busy")}, "partly", (A, C), (), "lead@plant.example: 450"),
        ({"RCPT": answer_for(lead="450 busy", shift="550 no")}, "partly", (A,), (C,), "shift"),
        ({"RCPT": answer_for(qa="450 a", lead="450 b", shift="550 no")}, "later", (), (C,), "550 no"),
        # RFC 5321, 4.5.3.1.10: 552 to RCPT means too many recipients at once, a matter of time
        ({"RCPT": answer_for(shift="552 too many recipients")}, "partly", (A, B), (), "552"),
        ({"RCPT": answer_for(lead="421 closing")}, "later", (), (), "421"),
        ({"RCPT": answer_for(lead=None)}, "later", (), (), "broke at lead"),
        ({"DATA": "451 no"}, "later", (), (), "451"),
        ({"DATA": "554 5.5.1 no"}, "refused", (), (A, B, C), "554"),
        ({"content": "451 4.6.0 scanner busy"}, "later", (), (), "scanner"),
        ({"content": "554 5.7.1 looks like spam"}, "refused", (), (A, B, C), "spam"),
        ({"content": "421 closing"}, "later", (), (), "421"),
        ({"content": None}, "later", (), (), "may have arrived"),
        ({"DATA": None}, "later", (), (), "may have arrived"),
    ],
    ids=lambda v: str(v)[:40],
)
def test_every_step_of_the_dialogue_is_judged_on_its_own(
    desk, mailer, message, answers, kind, accepted, refused, said
):
    """RFC 5321: 4yz may be tried again, 5yz not unchanged; RCPT is answered for each address."""
    with desk(**answers) as server:
        sender = mailer(server.port)
        outcome = sender.send(message(), (A, B, C))
        sender.close()
    assert (outcome.kind, outcome.accepted, outcome.refused) == (kind, accepted, refused), outcome
    assert said in outcome.detail
    assert len(server.taken) == (kind in {"sent", "partly"})


def test_a_server_that_says_nothing_is_left_after_the_time_limit(desk, mailer, message):
    with desk(greeting=lambda *_: time.sleep(1.0)) as server:
        outcome = mailer(server.port, timeout_s=0.2).send(message(), (A,))
    assert (outcome.kind, outcome.channel_wide) == ("later", True)


@pytest.mark.parametrize(
    "big",
    [
        {"content": lambda text, _: "552 message too large" if "image/png" in text else "250 kept"},
        {"content": lambda text, _: "554 5.3.4 too big" if "image/png" in text else "250 kept"},
        {
            "MAIL": lambda text, _: (
                "552 5.3.4 too big" if int(text.lower().split("size=")[1]) > 1500 else "250 ok"
            )
        },
    ],
    ids=["552 after content", "5.3.4 after content", "552 to the stated size"],
)
def test_a_mail_too_big_is_sent_at_once_without_pictures_under_the_same_id(desk, mailer, message, big):
    with desk(**big) as server:
        outcome = mailer(server.port).send(message(), (A,))
    assert (outcome.kind, outcome.accepted) == ("sent", (A,)), outcome
    assert "without pictures" in outcome.detail
    (taken,) = server.taken
    mail = message_from_string(taken, policy=policy.default)
    assert mail["Message-ID"] == mail_id("a-000012.raised", "quality", "gapbell@plant.example")
    assert [p.get_content_type() for p in mail.walk()] == ["multipart/alternative", "text/plain", "text/html"]
    page = mail.get_body(("html",)).get_content()
    assert "cid:" not in page
    assert "Staircase of leaks" in page


def test_a_mail_too_big_even_without_pictures_is_refused(desk, mailer, message):
    with desk(content="552 too large") as server:
        sender = mailer(server.port)
        for m in (message(), message(images={})):
            assert sender.send(m, (A,)).kind == "refused"


def test_one_session_carries_all_messages_and_a_stale_one_is_opened_anew(desk, mailer, message):
    with desk(MAIL=lambda _, line: None if line == 1 and len(server.taken) == 2 else "250 ok") as server:
        sender = mailer(server.port)
        kinds = [sender.send(message(message_id=f"m-{n}"), (A,)).kind for n in range(4)]
    assert kinds == ["sent"] * 4
    assert (server.lines, len(server.taken)) == (2, 4)


def test_a_refusal_leaves_the_session_fit_for_the_next_message(desk, mailer, message):
    with desk(RCPT=answer_for(lead="550 unknown")) as server:
        sender = mailer(server.port)
        kinds = [sender.send(message(), to).kind for to in ((B,), (A,))]
    assert kinds == ["refused", "sent"]
    assert server.lines == 1


def test_a_message_without_an_address_or_with_an_impossible_one_is_refused_plainly(desk, mailer, message):
    with desk() as server:
        assert mailer(server.port).send(message(), ()).kind == "refused"
        outcome = mailer(server.port).send(message(), ("no\r\nRCPT TO:<x@y>@plant.example",))
    assert outcome.kind == "refused"
    assert not any("x@y" in line for line in server.heard)


# ---------------------------------------------------------------------- TLS and login


@pytest.mark.parametrize(
    ("answers", "kind", "said"),
    [
        ({}, "paused", "offers no STARTTLS"),
        ({"EHLO": OFFERS_TLS, "STARTTLS": "454 4.7.0 not just now"}, "later", "454"),
        ({"EHLO": OFFERS_TLS, "STARTTLS": "502 no"}, "paused", "refused STARTTLS"),
        ({"EHLO": OFFERS_TLS, "STARTTLS": None}, "later", "cannot be reached"),
        # the server says "go" and then talks on in clear text: no TLS comes about, nothing is sent
        ({"EHLO": OFFERS_TLS}, "later", "cannot be reached"),
    ],
    ids=["not offered", "put off", "refused", "hangs up", "no TLS follows"],
)
def test_nothing_is_ever_sent_in_clear_text_where_tls_is_asked_for(
    desk, mailer, message, login, answers, kind, said
):
    with desk(**answers) as server:
        outcome = mailer(server.port, security="starttls", timeout_s=1.0, **login).send(message(), (A,))
    assert outcome.kind == kind, outcome
    assert said in outcome.detail
    assert not [line for line in server.heard if line.startswith(("AUTH", "MAIL"))]


def test_an_untrusted_certificate_a_wrong_name_and_an_old_protocol_send_nothing(
    desk, mailer, message, login, certificate, server_tls, tmp_path
):
    other = make_certificate(tmp_path)[0]
    common = {"security": "starttls", **login}
    with desk(server_tls, EHLO=OFFERS_TLS) as server:
        untrusted = mailer(server.port, ca_file=other, **common).send(message(), (A,))
        nameless = mailer(server.port, host="127.0.0.2", ca_file=certificate[0], **common).probe()
        missing = mailer(server.port, ca_file=tmp_path / "none.pem", **common).send(message(), (A,))
        (tmp_path / "bad.pem").write_text("no certificate")
        unreadable = mailer(server.port, ca_file=tmp_path / "bad.pem", **common).send(message(), (A,))
    assert (untrusted.kind, missing.kind, unreadable.kind) == ("paused",) * 3
    assert "not trusted" in untrusted.detail
    assert "none.pem" in missing.detail
    assert "bad.pem" in unreadable.detail
    assert nameless.kind in {"paused", "later"}  # 127.0.0.2 is not this server on every system
    assert not [line for line in server.heard if line.startswith(("AUTH", "MAIL"))]


def test_tls_from_the_first_byte_works_and_the_environment_may_name_the_certificate(
    desk, mailer, message, server_tls, certificate, monkeypatch
):
    monkeypatch.setenv("SSL_CERT_FILE", str(certificate[0]))
    with desk(server_tls, at_once=True) as server:
        outcome = mailer(server.port, security="tls", host="localhost").send(message(), (A,))
    assert outcome.kind == "sent", outcome
    assert len(server.taken) == 1


@pytest.mark.parametrize(
    ("answers", "kind", "said"),
    [
        ({"EHLO": OFFERS_LOGIN, "AUTH": "535 5.7.8 bad login"}, "paused", "535"),
        ({"EHLO": OFFERS_LOGIN, "AUTH": "454 4.7.0 directory down"}, "later", "454"),
        ({"EHLO": OFFERS_LOGIN, "AUTH": None}, "later", "cannot be reached"),
        ({}, "paused", "no way to log in"),
        ({"EHLO": "250-desk\r\n250 AUTH GSSAPI"}, "paused", "no way to log in"),
    ],
    ids=["wrong password", "put off", "hangs up", "no login offered", "unknown ways only"],
)
def test_a_login_that_fails_pauses_the_channel_unless_it_is_a_matter_of_time(
    desk, mailer, message, login, answers, kind, said
):
    with desk(**answers) as server:
        outcome = mailer(server.port, **login).send(message(), (A,))
    assert outcome.kind == kind, outcome
    assert said in outcome.detail
    assert not [line for line in server.heard if line.startswith("MAIL")]


def test_a_login_beyond_ascii_is_sent_as_utf_8(desk, mailer, message, monkeypatch):
    """RFC 4616: AUTH PLAIN carries UTF-8."""
    monkeypatch.setenv("GAPBELL_PW", PASSWORD)
    with desk(EHLO=OFFERS_LOGIN) as server:
        sender = mailer(server.port, username="gapbell", password={"env": "GAPBELL_PW"})
        assert sender.send(message(), (A,)).kind == "sent"
    (said,) = [line for line in server.heard if line.startswith("AUTH")]
    assert base64.b64decode(said.split()[-1]).decode() == f"\0gapbell\0{PASSWORD}"


def test_a_login_without_tls_to_another_machine_is_never_tried(mailer, message, login):
    outcome = mailer(25, host="mail.plant.example", insecure_ok=True, **login).send(message(), (A,))
    assert outcome.kind == "paused"
    assert "without TLS" in outcome.detail


def test_a_missing_password_pauses_the_channel_and_names_the_variable(mailer, message, login, monkeypatch):
    monkeypatch.delenv("GAPBELL_PW")
    outcome = mailer(25, **login).send(message(), (A,))
    assert (outcome.kind, "GAPBELL_PW" in outcome.detail) == ("paused", True)


@pytest.mark.parametrize("password", ["geheim-42", PASSWORD])
def test_a_server_that_says_the_password_back_does_not_bring_it_into_our_words(
    desk, mailer, message, monkeypatch, caplog, password
):
    monkeypatch.setenv("GAPBELL_PW", password)
    caplog.set_level(0)
    told = base64.b64encode(f"\0gapbell\0{password}".encode()).decode()
    secrets = [password, told, base64.b64encode(password.encode()).decode()]
    with desk(
        EHLO=OFFERS_LOGIN,
        AUTH=lambda text, _: f"535 wrong: {password.encode().decode('latin-1')} {told} {text.split()[-1]}",
    ) as server:
        sender = mailer(server.port, username="gapbell", password={"env": "GAPBELL_PW"})
        outcome = sender.send(message(), (A,))
    assert outcome.kind == "paused"
    for secret in secrets:
        assert secret not in f"{outcome!r} {sender!r} {vars(sender)!r} {caplog.text}"


# ---------------------------------------------------------------------- the mail itself


def built(message, **changes):
    mail = build_mail(
        message(**changes), plant='Skærholmen "Works" AS', sender="gapbell@plant.example", to=(A, B)
    )
    return message_from_bytes(mail.as_bytes(), policy=policy.default)


def test_a_mail_is_seven_bit_whatever_its_words_are(message):
    """RFC 5322: lines of at most 998 octets, CRLF; RFC 2045: no eight-bit text unless a relay offers it."""
    long_word = "æ" * 5000
    mail = build_mail(
        message(text=f"Lekkasjer på prøvebenk\n{long_word}\n", html=f"<p>{long_word}</p>", subject=long_word[:300]),
        plant="Skærholmen", sender="gapbell@plant.example", to=(A,),
    )  # fmt: skip
    raw = mail.as_bytes()
    assert raw.isascii()
    assert max(len(line) for line in raw.split(b"\r\n")) <= 998
    assert b"\n" not in raw.replace(b"\r\n", b"")
    again = message_from_bytes(raw, policy=policy.default)
    assert again.get_body(("plain",)).get_content().splitlines() == ["Lekkasjer på prøvebenk", long_word]


def test_no_value_can_begin_a_header_of_its_own(message):
    mail = built(message, subject="Worse\r\nBcc: all@plant.example\u2028X: y", recipient="quality\r\nX-A: b")
    assert (mail["Bcc"], mail["X"], mail["X-A"]) == (None, None, None)
    assert mail["Subject"] == "Worse Bcc: all@plant.example X: y"


def test_the_list_id_is_one_name_for_each_group(message):
    """RFC 2919: phrase, then a name like a domain in angle brackets."""
    assert str(built(message)["List-Id"]).endswith("<quality.gapbell.plant.example>")
    assert str(built(message, recipient="Süd 2")["List-Id"]).endswith("<s-d-2.gapbell.plant.example>")


def test_an_update_refers_to_the_first_mail_of_its_alert(message):
    first, update = built(message), built(message, message_id="a-000012.update-1", kind="update")
    assert (first["In-Reply-To"], first["References"]) == (None, None)
    assert update["In-Reply-To"] == update["References"] == first["Message-ID"]
    assert (update["Gapbell-Kind"], update["Gapbell-Alert"]) == ("update", "A-000012")


def test_a_repeat_names_all_addresses_though_it_goes_to_the_rest_only(desk, mailer, message):
    with desk() as server:
        mailer(server.port).send(message(), (B,), shown_to=(A, B))
    (taken,) = server.taken
    assert message_from_string(taken, policy=policy.default)["To"] == f"{A}, {B}"
    assert [line for line in server.heard if line.startswith(("MAIL", "RCPT"))] == [
        f"MAIL FROM:<gapbell@plant.example> size={len(taken)}",
        f"RCPT TO:<{B}>",
    ]


def test_probing_reaches_the_server_and_sends_nothing(desk, mailer):
    with desk() as server:
        assert mailer(server.port).probe().kind == "sent"
    assert [line.split()[0] for line in server.heard] == ["EHLO", "QUIT"]
    assert mailer(server.port).probe().kind == "later"  # it is gone by now
