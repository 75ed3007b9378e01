"""Key files."""

import pytest
import zmq
import zmq.auth

from monitor.errors import InputError
from monitor.sources.keys import Curve, make_keys, read_keys, secure


def test_keys_are_a_pair_and_the_secret_is_for_its_owner_alone(tmp_path):
    public, secret = make_keys(tmp_path / "keys", "gauge")
    assert (public.name, secret.name) == ("gauge.key", "gauge.key_secret")
    assert secret.stat().st_mode & 0o077 == 0
    shown, private = read_keys(secret, secret=True)
    # the library derives the public key from the secret one: the two belong together
    assert zmq.curve_public(private) == shown == read_keys(public, secret=False)[0]
    assert read_keys(public, secret=False)[1] is None
    assert sorted(path.name for path in (tmp_path / "keys").iterdir()) == ["gauge.key", "gauge.key_secret"]


def test_keys_are_never_replaced(tmp_path):
    public, secret = make_keys(tmp_path, "gauge")
    before = secret.read_bytes()
    with pytest.raises(InputError, match="exists already"):
        make_keys(tmp_path, "gauge")
    public.unlink()
    with pytest.raises(InputError, match="exists already"):
        make_keys(tmp_path, "gauge")
    assert secret.read_bytes() == before


@pytest.mark.parametrize("name", ["", "..", ".hidden", "a/b", "a b", "x" * 101])
def test_names_that_are_no_file_names_are_refused(tmp_path, name):
    with pytest.raises(InputError, match="a key's name"):
        make_keys(tmp_path, name)


def test_a_folder_that_cannot_be_is_refused(tmp_path):
    (tmp_path / "file").write_text("")
    with pytest.raises(InputError, match="no keys can be made there"):
        make_keys(tmp_path / "file", "gauge")


def test_files_that_hold_not_what_is_needed_are_refused(tmp_path):
    public, secret = make_keys(tmp_path, "gauge")
    with pytest.raises(InputError, match="holds no secret key"):
        read_keys(public, secret=True)
    with pytest.raises(InputError, match="cannot be read"):
        read_keys(tmp_path / "other.key", secret=False)
    junk = tmp_path / "junk.key"
    junk.write_text("nothing here")
    with pytest.raises(InputError, match="is not a key file"):
        read_keys(junk, secret=False)
    junk.write_bytes(public.read_bytes().replace(b'"', b"", 1)[:-20])
    with pytest.raises(InputError, match=r"damaged|not a key file"):
        read_keys(junk, secret=False)
    context = zmq.Context()
    with context.socket(zmq.SUB) as sock:
        with pytest.raises(InputError, match="server's public key"):
            secure(context, sock, Curve(secret), bind=False)
        with pytest.raises(InputError, match="no folder"):
            secure(context, sock, Curve(secret, clients=tmp_path / "none"), bind=True)
        (tmp_path / "empty").mkdir()
        with pytest.raises(InputError, match="nobody could connect"):
            secure(context, sock, Curve(secret, clients=tmp_path / "empty"), bind=True)
    context.term()
