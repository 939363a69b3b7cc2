"""Requests to an endpoint: what is in them, what follows from the answer, and what they never show."""

from __future__ import annotations

import base64
import json
import logging
from datetime import UTC, datetime, timedelta

import pytest

from watcher.notify.base import Message, PayloadError, plain_json
from watcher.notify.signing import SigningKeyError, sign, signing_key
from watcher.notify.webhook import MAX_BODY, _retry_after
from watcher.trial.servers import make_certificate

NOW = datetime(2026, 3, 4, 10, 15, tzinfo=UTC)
KEY = "MfKQ9r8GKYqrTwjUPD8ILPZIo2LaLaSw"


def always(status, headers=None, text=b""):
    return lambda _: (status, headers or {}, text)


@pytest.mark.parametrize("secret", [KEY, f"whsec_{KEY}", f"  whsec_{KEY}\n"])
def test_the_published_signature_comes_out_with_and_without_the_prefix(secret):
    """Published: Standard Webhooks 1.0, its own test vector."""
    headers = sign(secret, "msg_p5jXN8AQM9LWM0D4loKWxJek", 1614265330, b'{"test": 2432232314}')
    assert headers == {
        "webhook-id": "msg_p5jXN8AQM9LWM0D4loKWxJek",
        "webhook-timestamp": "1614265330",
        "webhook-signature": "v1,g0hM9SsE+OTPJTGt/tmIKtSyZlE3uFJELVlNIOLJ1OE=",
    }


@pytest.mark.parametrize(
    "secret", ["not base64!", base64.b64encode(bytes(23)).decode(), base64.b64encode(bytes(65)).decode(), "é"]
)
def test_a_signing_secret_of_another_shape_is_refused_without_being_shown(secret):
    """Standard Webhooks 1.0: base64 of 24 to 64 bytes."""
    with pytest.raises(SigningKeyError, match=r"signing secret") as caught:
        signing_key(secret)
    assert secret not in str(caught.value)
    assert caught.value.__cause__ is None


@pytest.mark.parametrize(
    ("status", "kind", "refused"),
    [
        (200, "sent", ()), (201, "sent", ()), (202, "sent", ()), (204, "sent", ()),
        (301, "refused", ("x",)), (307, "refused", ("x",)), (400, "refused", ("x",)), (401, "paused", ()), (403, "paused", ()),
        (404, "refused", ("x",)), (408, "later", ()), (410, "refused", ("x",)), (415, "refused", ("x",)), (422, "refused", ("x",)),
        (425, "later", ()), (429, "later", ()), (500, "later", ()), (501, "refused", ("x",)), (502, "later", ()), (503, "later", ()),
        (504, "later", ()), (520, "later", ()),
    ],
)  # fmt: skip
def test_each_status_has_its_consequence(hook, poster, message, status, kind, refused):
    """The classes of the design's section on generic webhooks; 401 and 403 are bad credentials."""
    with hook(always(status, {"Location": "http://127.0.0.1:1/"} if status < 400 else {})) as endpoint:
        outcome = poster(endpoint.url).send(message(), ("x",))
    assert (outcome.kind, outcome.refused) == (kind, refused), outcome
    assert str(status) in outcome.detail
    assert len(endpoint.got) == 1  # a redirect is not followed


@pytest.mark.parametrize(
    ("header", "seconds"),
    [
        ("120", 120.0), ("0", 0.0), ("Wed, 04 Mar 2026 10:17:30 GMT", 150.0), ("Wed, 04 Mar 2026 10:00:00 GMT", 0.0),
        ("999999999", 21600.0), ("9" * 400, 21600.0), ("Thu, 01 Jan 2099 00:00:00 GMT", 21600.0), ("soon", None), ("-5", None), ("", None),
        ("١٢", None), (None, None),
    ],
)  # fmt: skip
def test_both_forms_of_retry_after_are_understood_and_capped_at_six_hours(header, seconds):
    """RFC 9110, 10.2.3: seconds or a date."""
    assert _retry_after(header, NOW) == seconds


@pytest.mark.parametrize("status", [429, 503])
def test_an_endpoint_that_asks_to_be_left_alone_is_left_alone_by_all(hook, poster, message, status):
    with hook(always(status, {"Retry-After": "90"})) as endpoint:
        outcome = poster(endpoint.url).send(message())
    assert (outcome.kind, outcome.retry_after, outcome.channel_wide) == ("later", 90.0, True)


def test_an_endpoint_that_hangs_up_or_is_slow_or_is_not_there_is_tried_later(hook, poster, message):
    import time

    with hook(lambda _: None) as endpoint:
        assert poster(endpoint.url).send(message()).kind == "later"
    assert poster(endpoint.url).send(message()).kind == "later"  # it is gone now
    assert poster(endpoint.url).probe().kind == "later"
    with hook(lambda _: (time.sleep(0.6), (200, {}, b""))[1]) as endpoint:
        outcome = poster(endpoint.url, timeout_s=0.2).send(message())
    assert (outcome.kind, "may have arrived" in outcome.detail) == ("later", True)


def test_a_body_of_text_is_one_object_with_the_short_text_where_there_is_one(hook, poster, message):
    with hook(always(204)) as endpoint:
        sender = poster(endpoint.url)
        sender.send(message(short="Kort æøå"))
        sender.send(message())
    (_, headers, first), (_, _, second) = endpoint.got
    assert headers["content-type"] == "application/json"
    assert "webhook-id" not in headers
    assert json.loads(first) == {"text": "Kort æøå"}
    assert json.loads(second) == {"text": "Seal leaks come more often.\n"}


def test_a_cloud_event_has_every_required_attribute_and_is_signed_over_its_bytes(
    hook, poster, message, monkeypatch
):
    """CloudEvents 1.0, structured mode; Standard Webhooks 1.0."""
    monkeypatch.setenv("HOOK_KEY", f"whsec_{KEY}")
    with hook(always(200)) as endpoint:
        sender = poster(endpoint.url, body="cloudevents", secret={"env": "HOOK_KEY"})
        for _ in range(2):
            sender.send(message(data={"id": "A-000012", "rate": float("nan"), "since": NOW}))
    (_, headers, body), (_, again, _) = endpoint.got
    assert headers["content-type"] == "application/cloudevents+json"
    assert json.loads(body) == {
        "specversion": "1.0", "id": "a-000012.raised", "source": "/plants/Skerry%20Point%20Works", "type": "gapbell.alert.raised",
        "time": "2026-03-04T10:15:00+00:00", "datacontenttype": "application/json",
        "data": {"id": "A-000012", "rate": None, "since": "2026-03-04T10:15:00+00:00", "text": "Seal leaks come more often.\n"},
    }  # fmt: skip
    assert headers["webhook-id"] == again["webhook-id"] == "a-000012.raised"
    assert headers["webhook-timestamp"] == str(int(NOW.timestamp()))
    expected = sign(KEY, "a-000012.raised", int(NOW.timestamp()), body)["webhook-signature"]
    assert headers["webhook-signature"] == expected


@pytest.mark.parametrize("kind", ["text", "cloudevents"])
@pytest.mark.parametrize("what", ["records", "text", "many keys"])
def test_a_body_is_kept_small_and_says_when_something_was_left_out(hook, poster, message, kind, what):
    """CloudEvents 1.0: events beyond 64 KiB need not be taken by anybody."""
    data = {
        "id": "A-000012",
        "records": [{"serial": f"æ{n:09d}"} for n in range(20_000 if what == "records" else 2)],
    }
    if what == "many keys":
        data |= {f"key {n}": "x" * 900 for n in range(200)}
    big = message(data=data, short="ø" * 90_000 if what == "text" else "Kort")
    with hook(always(200)) as endpoint:
        poster(endpoint.url, body=kind).send(big)
    ((_, _, body),) = endpoint.got
    assert len(body) <= MAX_BODY
    found = json.loads(body)
    if kind == "cloudevents":
        assert found["data"]["id"] == "A-000012"
        assert found["data"]["shortened"] is True
        assert found["data"]["records"]
    elif what == "text":
        assert "shortened" in found["text"]


# ---------------------------------------------------------------------- set up wrongly


def test_tls_is_verified_against_ca_file_or_the_environment(
    hook, poster, message, certificate, server_tls, tmp_path, monkeypatch
):
    other = make_certificate(tmp_path)[0]
    for name in ("REQUESTS_CA_BUNDLE", "SSL_CERT_FILE"):
        monkeypatch.delenv(name, raising=False)
    with hook(always(200), server_tls) as endpoint:
        for ca_file in (None, other):
            for outcome in (
                poster(endpoint.url, ca_file=ca_file).send(message()),
                poster(endpoint.url, ca_file=ca_file).probe(),
            ):
                assert outcome.kind == "paused", outcome
                assert "not trusted" in outcome.detail
        assert endpoint.got == []
        assert poster(endpoint.url, ca_file=certificate[0]).probe().kind == "sent"
        assert endpoint.got == []
        assert poster(endpoint.url, ca_file=certificate[0]).send(message()).kind == "sent"
        for name in ("REQUESTS_CA_BUNDLE", "SSL_CERT_FILE"):
            monkeypatch.setenv(name, str(certificate[0]))
            assert poster(endpoint.url).send(message()).kind == "sent"
            monkeypatch.setenv(name, str(tmp_path / "none.pem"))
            assert poster(endpoint.url).send(message()).kind == "paused"
            monkeypatch.delenv(name)
    assert len(endpoint.got) == 3


def test_what_is_missing_or_malformed_in_the_set_up_pauses_the_channel(poster, message, monkeypatch):
    assert poster({"env": "NO_SUCH_HOOK"}).send(message()).kind == "paused"
    for wrong in (
        "ftp://x/geheim",
        "geheim",
        "http://plant.example/geheim",
        "https://[geheim",
        "https://x:geheim/",
    ):
        monkeypatch.setenv("HOOK_URL", wrong)
        for outcome in (poster({"env": "HOOK_URL"}).send(message()), poster({"env": "HOOK_URL"}).probe()):
            assert outcome.kind in {"paused", "later"}, wrong
            assert "geheim" not in outcome.detail
    monkeypatch.setenv("HOOK_KEY", "geheim")
    outcome = poster("https://127.0.0.1:1/", secret={"env": "HOOK_KEY"}).send(message())
    assert outcome.kind == "paused"
    assert "geheim" not in outcome.detail
    template = poster("https://127.0.0.1:1/", body="template", template="x.j2").send(message())
    assert (template.kind, "not yet available" in template.detail) == ("refused", True)


@pytest.mark.parametrize("status", [200, 302, 400, 401, 404, 500, None])
def test_a_secret_address_and_key_appear_in_no_outcome_log_or_repr(
    hook, poster, message, monkeypatch, caplog, status
):
    caplog.set_level(logging.DEBUG)
    key = base64.b64encode(b"a key that nobody may see").decode()
    path, query = "/rooms/Zx81-geheim-pfad/in", "?token=geheim-frage"

    def echo(_):
        told = f"you sent {path}{query} with {key}".encode()
        return None if status is None else (status, {"Content-Type": "text/plain", "Location": path}, told)

    monkeypatch.setenv("HOOK_KEY", key)
    with hook(echo, path=path + query) as endpoint:
        monkeypatch.setenv("HOOK_URL", endpoint.url)
        sender = poster({"env": "HOOK_URL"}, secret={"env": "HOOK_KEY"})
        outcomes = [sender.send(message()), sender.probe()]
    outcomes.append(sender.send(message()))  # it is gone now
    shown = f"{outcomes!r} {sender!r} {vars(sender)!r} {caplog.text}"
    for secret in ("geheim", key):
        assert secret not in shown
    assert endpoint.got[0][0] == path + query


def test_proxies_and_logins_of_the_surroundings_are_not_used(hook, poster, message, monkeypatch, tmp_path):
    monkeypatch.setenv("HTTP_PROXY", "http://127.0.0.1:1")
    monkeypatch.setenv("http_proxy", "http://127.0.0.1:1")
    (tmp_path / "netrc").write_text("machine localhost login me password geheim\n")
    monkeypatch.setenv("NETRC", str(tmp_path / "netrc"))
    with hook(always(200)) as endpoint:
        assert poster(endpoint.url).send(message()).kind == "sent"
    assert "authorization" not in endpoint.got[0][1]


# ---------------------------------------------------------------------- the message as it is kept


def test_a_message_comes_back_from_the_outbox_as_it_went_in(message):
    """Law: a round trip through JSON."""
    for one in (message(), message(html=None, images={}, thread=None, alert_label=None, data={})):
        assert Message.from_payload(json.loads(json.dumps(one.to_payload(), allow_nan=False))) == one


@pytest.mark.parametrize(
    "damage", [{"created": "yesterday"}, {"created": "2026-03-04T10:15:00"}, {"images": {"a": "%"}}, {"x": 1}, {"data": None}]
)  # fmt: skip
def test_a_damaged_message_is_told_from_a_sound_one(message, damage):
    with pytest.raises(PayloadError, match="stored message"):
        Message.from_payload({**message().to_payload(), **damage})


def test_values_that_json_does_not_know_become_ones_it_does():
    import numpy as np

    got = plain_json(
        {1: (np.int64(2), np.float64("nan"), np.arange(2)), "t": NOW, "d": timedelta(1), "i": float("inf")}
    )
    assert got == {"1": [2, None, [0, 1]], "t": NOW.isoformat(), "d": "1 day, 0:00:00", "i": None}
