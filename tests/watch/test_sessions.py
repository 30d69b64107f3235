"""Cookies that cannot be made up, tokens that belong to one session, and slow guessing."""

from __future__ import annotations

import pytest

from service.watch.sessions import SESSION_S, Attempts, Seal, Session, begin

NOW_S = 1_764_600_000
SECRET = b"s" * 32


def test_a_cookie_comes_back_as_the_session_it_was() -> None:
    """Every worker that knows the secret of the database reads it."""
    session = begin("abc123", NOW_S)
    assert Seal(SECRET).read(Seal(SECRET).write(session), NOW_S) == session
    assert session.ends_s == NOW_S + SESSION_S


def test_two_sessions_of_a_key_differ() -> None:
    """A token of one is of no use in the other."""
    first, second = begin("abc123", NOW_S), begin("abc123", NOW_S)
    assert first.nonce != second.nonce
    assert not Seal(SECRET).token_fits(second.nonce, Seal(SECRET).token(first.nonce))


def test_a_session_ends() -> None:
    """In its last second it is good, then never again."""
    cookie = Seal(SECRET).write(begin("abc123", NOW_S))
    assert Seal(SECRET).read(cookie, NOW_S + SESSION_S - 1) is not None
    assert Seal(SECRET).read(cookie, NOW_S + SESSION_S) is None


def test_another_database_reads_nothing() -> None:
    """The seal is derived from a secret of the database."""
    cookie = Seal(SECRET).write(begin("abc123", NOW_S))
    assert Seal(b"t" * 32).read(cookie, NOW_S) is None


@pytest.mark.parametrize("place", [0, 3, 8, 20, -1])
def test_a_changed_cookie_is_no_cookie(place: int) -> None:
    """Whatever letter is changed, the signature no longer fits."""
    cookie = list(Seal(SECRET).write(Session("abc123", NOW_S + 50, "0" * 32)))
    cookie[place] = "1" if cookie[place] != "1" else "2"
    assert Seal(SECRET).read("".join(cookie), NOW_S) is None


@pytest.mark.parametrize("cookie", ["", ".", "a.b.c.d", "é.1.2.3", "\udcff", "x" * 5000])
def test_rubbish_is_no_cookie(cookie: str) -> None:
    """Nothing that was not written here is read, and nothing breaks."""
    assert Seal(SECRET).read(cookie, NOW_S) is None


def test_a_cookie_is_no_token() -> None:
    """What signs a session signs no form."""
    session = begin("abc123", NOW_S)
    signature = Seal(SECRET).write(session).rpartition(".")[2]
    assert not Seal(SECRET).token_fits(str(session), signature)


def test_five_failures_make_an_address_wait() -> None:
    """The sixth try waits until the first failure is a minute old; others do not wait."""
    attempts = Attempts()
    for second in range(5):
        assert attempts.wait_s("here", second) == 0
        attempts.failed("here", second)
    assert attempts.wait_s("here", 10.0) == 50
    assert attempts.wait_s("there", 10.0) == 0
    assert attempts.wait_s("here", 61.0) == 0


def test_old_failures_are_forgotten() -> None:
    """A guesser with many addresses does not fill the memory for ever."""
    attempts = Attempts()
    for number in range(100):
        attempts.failed(f"address {number}", 0.0)
    attempts.failed("here", 100.0)
    assert list(attempts._failed) == ["here"]


def test_a_session_does_not_outlive_the_text_of_its_key() -> None:
    """An old text of a renewed key opens the page only as long as it is good itself."""
    assert begin("abc123", NOW_S, (NOW_S + 60) * 1000).ends_s == NOW_S + 60
    assert begin("abc123", NOW_S, (NOW_S + 2 * SESSION_S) * 1000).ends_s == NOW_S + SESSION_S
