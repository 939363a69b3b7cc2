"""The invented yard through the whole product, in one command; then its mails are read as people would."""

from __future__ import annotations

import json
import re
import subprocess
import sys
from email import message_from_bytes, policy
from pathlib import Path

import pytest


@pytest.fixture(scope="module")
def yard(tmp_path_factory) -> tuple[Path, str]:
    out = tmp_path_factory.mktemp("yard") / "out"
    done = subprocess.run(
        [sys.executable, "-m", "watcher", "trial", "--out", str(out)],
        capture_output=True,
        text=True,
        check=False,
        timeout=600,
    )
    assert done.returncode == 0, done.stdout + done.stderr
    return out, done.stdout


@pytest.fixture(scope="module")
def mails(yard):
    return [
        message_from_bytes(f.read_bytes(), policy=policy.default)
        for f in sorted((yard[0] / "mails").glob("*.eml"))
    ]


def test_the_story_names_what_the_yard_is_for(yard):
    _, story = yard
    assert "Seal leaks at proof test: worse" in story
    assert "raised, better. Slipping brakes" in story
    assert "Wiring defects in control cabinets: worse" in story
    assert "Blisters on painted housings: silent" in story
    # common practice: one, none and three a year of a thing that happens about once a year is no evidence
    assert "Broken brake springs at winch final test: steady" in story


def test_the_shifts_are_dated_where_the_yard_put_them(yard):
    from datetime import datetime

    from watcher.commands import list_alerts
    from watcher.config import load_config
    from watcher.trial import plant

    found = {
        a["stream"]: a for a in list_alerts(load_config(yard[0] / "plant.toml"), everything=True)["alerts"]
    }
    for stream, day in (
        ("seal-leak", plant.SEALS_WORSE_FROM),
        ("brake-slip", plant.BRAKES_BETTER_FROM),
        ("wiring", plant.WIRING_WORSE_FROM),
    ):
        began = found[stream]["shift_began"]
        low, high = (datetime.fromisoformat(began[k]).date() for k in ("earliest", "latest"))
        assert low <= day <= high, stream
    assert set(found) == {"seal-leak", "brake-slip", "wiring"}


def test_no_mail_comes_twice_and_each_shift_is_one_thread(mails):
    ids = [m["Message-ID"] for m in mails]
    assert len(ids) == len(set(ids))
    first = {m["Gapbell-Alert"]: m["Message-ID"] for m in mails if m["Gapbell-Kind"] == "alert"}
    for m in mails:
        if m["Gapbell-Alert"] and m["Gapbell-Kind"] != "alert":
            assert m["In-Reply-To"] == first[m["Gapbell-Alert"]]
    assert {m["Gapbell-Kind"] for m in mails} >= {
        "alert",
        "update",
        "settled",
        "digest",
        "feed-notice",
    }


def test_the_text_part_is_enough_and_short_lined_and_pictures_resolve(mails):
    for m in mails:
        text = m.get_body(("plain",)).get_content()
        assert max(map(len, text.splitlines())) <= 76 + 8, m["Subject"]
        assert "None" not in text
        assert "nan" not in re.findall(r"\w+", text)
        html = m.get_body(("html",)).get_content()
        cids = {p["Content-ID"].strip("<>") for p in m.walk() if p["Content-ID"]}
        assert set(re.findall(r'src="cid:([^"]+)"', html)) == cids
        assert all(
            len(p.get_payload(decode=True)) < 60_000 for p in m.walk() if p.get_content_type() == "image/png"
        )
        assert all(re.search(r'alt="[^"]{20,}"', tag) for tag in re.findall(r"<img[^>]*>", html))
    alert = next(m for m in mails if m["Gapbell-Kind"] == "alert" and m["Gapbell-Alert"] == "A-000002")
    text = alert.get_body(("plain",)).get_content()
    for part in (
        "coming closer together: one in about",
        "of production",
        "The change began between",
        "Reaction plan",
        "gapbell take A-000002",
    ):
        assert part in " ".join(text.split())


def test_the_safety_stream_carries_its_cautions_and_the_silent_one_is_named(mails):
    digest = [m for m in mails if m["Gapbell-Kind"] == "digest"][-1].get_body(("plain",)).get_content()
    flat = " ".join(digest.split())
    assert "A quiet stretch is no proof of safety." in flat
    assert "its source paint-booth is silent" in flat


def test_chat_messages_are_signed_and_name_their_alert(yard):
    kept = [json.loads(f.read_text(encoding="utf-8")) for f in sorted((yard[0] / "chat").glob("*.json"))]
    assert len(kept) >= 5
    assert all(any(k.lower() == "webhook-signature" for k in k_["headers"]) for k_ in kept)
    assert any("A-000002" in k["body"]["text"] for k in kept)


def test_the_page_needs_nothing_from_elsewhere(yard):
    page = (yard[0] / "digest.html").read_text(encoding="utf-8")
    assert "data:image/png;base64," in page
    assert not re.findall(r'(?:src|href)="(?!data:)[^"]+"', page)
