"""Key files: made once, kept to their owner, and refused where anything about them is not as it should be."""

import hashlib
import os
import re
import stat
import tomllib
from pathlib import Path

import pytest
import zmq
from skewline.node import AccessError, ClientKeys
from skewline.node.allowed import allow, read_allowed, revoke
from skewline.node.keys import PublicKey, SecretKey, make_key_files, read_key, read_public, read_secret
from zmq.utils import z85

# The pairs printed in RFC 26 and in zmq_curve(7) of libzmq: (public, secret) of the client and of the server.
PRINTED = [
    ("Yne@$w-vo<fVvi]a<NY6T1ed:M$fCG*[IaLV{hID", "D:)Q[IlAW!ahhC2ac:9*A}h:p?([4%wOTJ%JR%cs"),
    ("rq:rM>}U?@Lns47E1%kR.o@n%FcmmsL/@{H8]yf7", "JTKVSB%%)wK0E.X)V>+}o?pNmC{O&4W4b!Ni{Lh6"),
]
FIELD = 2**255 - 19


def key_text(kind: str, key: str, *, version: int = 1) -> str:
    return f'format = "skewline key"\nversion = {version}\nkind = "{kind}"\ncomment = "x"\nkey = "{key}"\n'


def write_secret(path: Path, text: str) -> Path:
    path.touch(0o600)
    path.write_text(text)
    return path


def test_a_pair_is_made_that_belongs_together_and_reads_back(tmp_path: Path) -> None:
    secret, public = make_key_files(tmp_path, "arm-3", 'the "third" arm, Süd')

    own, shown = read_secret(secret), read_public(public)
    assert zmq.curve_public(own.z85.encode()).decode() == shown.z85
    assert own.public == shown
    assert own.comment == shown.comment == 'the "third" arm, Süd'
    assert read_key(secret) == own
    assert ClientKeys.load(secret, public) == ClientKeys(own, shown)


def test_a_pair_s_files_are_toml_of_the_documented_keys_with_the_key_last(tmp_path: Path) -> None:
    secret, public = make_key_files(tmp_path, "arm-3")

    for path, kind in ((secret, "secret"), (public, "public")):
        table = tomllib.loads(path.read_text(encoding="utf-8"))
        key = table["key"]
        assert table == {"format": "skewline key", "version": 1, "kind": kind, "comment": "arm-3", "key": key}
        assert list(table)[-1] == "key"
        assert len(z85.decode(key)) == 32


@pytest.mark.parametrize("umask", [0o000, 0o022, 0o077])
def test_a_secret_file_is_its_owner_s_alone_from_its_first_moment(
    umask: int, tmp_path: Path, monkeypatch: pytest.MonkeyPatch
) -> None:
    opened: list[tuple[int, int]] = []
    really_open = os.open

    def watched(path: str | Path, flags: int, mode: int = 0o777) -> int:
        handle = really_open(path, flags, mode)
        if flags & os.O_CREAT and str(path).endswith(".secret.key"):
            opened.append((flags, stat.S_IMODE(os.fstat(handle).st_mode)))
        return handle

    monkeypatch.setattr(os, "open", watched)
    before = os.umask(umask)
    try:
        make_key_files(tmp_path, "arm-3")
    finally:
        os.umask(before)

    ((flags, mode),) = opened
    assert flags & os.O_EXCL
    assert mode == 0o600


@pytest.mark.parametrize("there", ["arm-3.secret.key", "arm-3.public.key"])
def test_a_file_that_is_there_is_never_written_over(there: str, tmp_path: Path) -> None:
    (tmp_path / there).write_text("precious")

    with pytest.raises(AccessError, match=f"{there} is there already and stays as it is; expected a new name"):
        make_key_files(tmp_path, "arm-3")

    assert {path.name: path.read_text() for path in tmp_path.iterdir()} == {there: "precious"}


@pytest.mark.parametrize("name", ["", "../arm", "a b", ".arm", "a\n", "ä", "a" * 65])
def test_a_name_that_makes_no_plain_file_name_is_refused(name: str, tmp_path: Path) -> None:
    with pytest.raises(AccessError, match="expected up to 64 letters, digits"):
        make_key_files(tmp_path, name)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("comment", ["two\nlines", "\x7f", "x" * 201])
def test_a_comment_that_toml_does_not_carry_on_one_line_is_refused(comment: str, tmp_path: Path) -> None:
    with pytest.raises(AccessError, match="expected up to 200 printable characters on one line"):
        make_key_files(tmp_path, "arm-3", comment)
    assert list(tmp_path.iterdir()) == []


@pytest.mark.parametrize("mode", [0o640, 0o604, 0o660, 0o610, 0o644])
def test_a_secret_that_others_may_read_is_refused_with_the_command_that_mends_it(mode: int, tmp_path: Path) -> None:
    secret, _ = make_key_files(tmp_path, "arm-3")
    secret.chmod(mode)

    with pytest.raises(AccessError, match=rf"mode {mode:04o}.* expected 0600: chmod 600 {secret}"):
        read_secret(secret)

    secret.chmod(0o600)
    assert read_secret(secret).comment == "arm-3"


def test_one_kind_of_key_where_the_other_is_expected_is_refused(tmp_path: Path) -> None:
    secret, public = make_key_files(tmp_path, "arm-3")

    with pytest.raises(AccessError, match=r"is a public key; expected a secret one: give NAME\.secret\.key"):
        read_secret(public)
    with pytest.raises(AccessError, match=r"is a secret key; expected a public one: .* hand the secret one to nobody"):
        read_public(secret)


def test_a_file_cut_short_anywhere_is_refused_and_what_it_held_is_not_shown(tmp_path: Path) -> None:
    secret, _ = make_key_files(tmp_path, "arm-3")
    text, held = secret.read_text(), read_secret(secret).z85
    end = text.rindex('"')

    for length in range(end + 1):
        secret.write_text(text[:length])
        with pytest.raises(AccessError, match=r"arm-3\.secret\.key") as refusal:
            read_secret(secret)
        assert held[:8] not in str(refusal.value)
        assert refusal.value.__cause__ is None or isinstance(refusal.value.__cause__, OSError)


@pytest.mark.parametrize(
    ("text", "complaint"),
    [
        ("hello", "no whole Skewline key file"),
        ('format = "skewline rig"\n', "no whole Skewline key file"),
        (key_text("public", "0" * 10), "expected 40 characters of Z85"),
        (key_text("public", "~" * 40), "expected 40 characters of Z85"),
        (key_text("public", "#" * 40), "expected 40 characters of Z85"),  # 85**5 - 1 does not fit 32 bits
        (key_text("public", "ä" * 40), "expected 40 characters of Z85"),
        (key_text("public", PRINTED[0][0], version=2), "version is not 1"),
        (key_text("other", PRINTED[0][0]), 'neither "public" nor "secret"'),
        (key_text("public", PRINTED[0][0]) + 'more = "y"\n', "more is no key of a key file"),
        ('format = "skewline key"\nversion = 1\nkind = "public"\nkey = 7\n', "cut short"),
        ("# " + "x" * 5000, "empty, too large or no file"),
        ("", "empty, too large or no file"),
    ],
)
def test_a_file_that_is_no_key_file_is_refused(text: str, complaint: str, tmp_path: Path) -> None:
    path = write_secret(tmp_path / "a.public.key", text)
    with pytest.raises(AccessError, match=complaint):
        read_public(path)


def test_what_is_no_file_is_refused_without_waiting_for_it(tmp_path: Path) -> None:
    os.mkfifo(tmp_path / "pipe", 0o600)
    for path in (tmp_path / "missing", tmp_path, tmp_path / "pipe"):
        with pytest.raises(AccessError, match="expected a key file"):
            read_key(path)


@pytest.mark.parametrize(("public", "secret"), PRINTED)
def test_the_keys_printed_in_the_protocol_s_documents_are_refused(public: str, secret: str, tmp_path: Path) -> None:
    assert zmq.curve_public(secret.encode()).decode() == public  # the pair is one: the test holds the true keys
    with pytest.raises(AccessError, match=r"printed in ZeroMQ's own documents.*make one"):
        read_public(write_secret(tmp_path / "p", key_text("public", public)))
    with pytest.raises(AccessError, match=r"printed in ZeroMQ's own documents.*make one"):
        read_secret(write_secret(tmp_path / "s", key_text("secret", secret)))


def test_keys_of_all_zeros_are_refused() -> None:
    zeros = z85.encode(bytes(32)).decode()
    with pytest.raises(AccessError, match="public key is all zeros"):
        PublicKey(zeros)
    with pytest.raises(AccessError, match="secret key is all zeros"):
        SecretKey(zeros)


def doubled(x: int | None) -> int | None:
    """Double a point of Curve25519 by its x (Montgomery 1987, section 10.3.1); None is the point at infinity."""
    if x is None:
        return None
    below = 4 * x * (x * x + 486662 * x + 1) % FIELD
    return (x * x - 1) ** 2 * pow(below, -1, FIELD) % FIELD if below else None


def test_public_keys_of_small_order_that_anybody_could_claim_are_refused() -> None:
    # All points whose order divides 8, found by walking the doubling backwards from infinity, in each way to write them.
    eighth = 325606250916557431795983626356110631294008115727848805560023387167927233504
    small = {0, 1, FIELD - 1, eighth, pow(eighth, -1, FIELD)}
    assert all(doubled(doubled(doubled(x))) is None for x in small)
    for x in [*small, FIELD, FIELD + 1, *(x + 2**255 for x in small)]:
        with pytest.raises(AccessError, match="all zeros or as weak"):
            PublicKey(z85.encode(x.to_bytes(32, "little")).decode())
    base_point = z85.encode((9).to_bytes(32, "little")).decode()
    assert PublicKey(base_point).raw[0] == 9


def test_a_secret_key_does_not_show_itself(tmp_path: Path) -> None:
    key = read_secret(make_key_files(tmp_path, "arm-3")[0])
    assert key.z85 not in repr(ClientKeys(key, key.public)) + str(key)


def test_a_fingerprint_is_the_beginning_of_the_key_s_sha256(tmp_path: Path) -> None:
    key = read_public(make_key_files(tmp_path, "arm-3")[1])
    assert key.fingerprint.replace(" ", "") == hashlib.sha256(z85.decode(key.z85)).hexdigest()[:32]


def test_allowing_copies_a_key_once_and_never_over_another(tmp_path: Path) -> None:
    folder, other = tmp_path / "allowed", tmp_path / "other"
    folder.mkdir()
    other.mkdir()
    _, public = make_key_files(tmp_path, "arm-3")
    _, namesake = make_key_files(other, "arm-3")

    path = allow(folder, public)
    assert path == folder / "arm-3.public.key"
    assert read_public(path) == read_public(public)
    renamed = public.rename(tmp_path / "again.public.key")
    assert allow(folder, renamed) == path
    with pytest.raises(AccessError, match="is there already and stays as it is"):
        allow(folder, namesake)
    assert read_allowed(folder).keys == {path: read_public(renamed)}


def test_revoking_takes_a_key_out_under_all_its_names_and_no_other(tmp_path: Path) -> None:
    folder = tmp_path / "allowed"
    folder.mkdir()
    _, arm = make_key_files(tmp_path, "arm-3")
    _, eye = make_key_files(tmp_path, "eye")
    for public in (arm, eye):
        allow(folder, public)
    (folder / "copy").write_text(arm.read_text())

    assert sorted(path.name for path in revoke(folder, "arm-3")) == ["arm-3.public.key", "copy"]
    assert [path.name for path in folder.iterdir()] == ["eye.public.key"]
    assert revoke(folder, "arm-3") == revoke(folder, arm) == []
    assert [path.name for path in revoke(folder, eye)] == ["eye.public.key"]


def test_what_is_no_sound_public_key_in_the_folder_lets_nobody_in_and_is_told(tmp_path: Path) -> None:
    folder = tmp_path / "allowed"
    folder.mkdir()
    secret, public = make_key_files(tmp_path, "arm-3")
    key = read_public(public)
    (folder / "sound.public.key").write_text(public.read_text())
    (folder / "cut.public.key").write_text(public.read_text()[:-10])
    (folder / "zero.public.key").write_text(key_text("public", "0" * 40))
    write_secret(folder / "secret.public.key", secret.read_text())
    (folder / ".hidden").write_text("an editor's")

    allowed = read_allowed(folder)

    assert allowed.keys == {folder / "sound.public.key": key}
    assert allowed.name_of(key.raw) == "sound"
    assert allowed.name_of(bytes(32)) is None
    names = [re.findall(r"(\w+)\.public\.key", fault)[0] for fault in allowed.faults]
    assert names == ["cut", "secret", "zero"]


def test_a_missing_folder_allows_nobody_and_says_so(tmp_path: Path) -> None:
    allowed = read_allowed(tmp_path / "gone")
    assert allowed.keys == {}
    assert "nobody is let in" in allowed.faults[0]
    _, public = make_key_files(tmp_path, "arm-3")
    with pytest.raises(AccessError, match=r"is no folder; expected the one that access\.allowed names"):
        allow(tmp_path / "gone", public)
