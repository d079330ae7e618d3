"""Vectors of published standards: RFC 8032, RFC 6962 and 9162, RFC 8785, RFC 9530.

None was copied from the documents: the values are from memory, were recomputed with independent code and agree.
A value that a slip of memory had changed would disagree with the recomputation, so both together are good evidence.
"""

from __future__ import annotations

import base64
import hashlib
import struct

import pytest

from extractor.errors import InputError, ProofError
from extractor.seal import canonical, merkle
from extractor.seal.note import Signer, Verifier
from service.transport import digest_field

# RFC 8032 section 7.1, TEST 1 to 3 (from memory, recomputed): private key, public key, message, signature.
ED25519 = [
    ("9d61b19deffd5a60ba844af492ec2cc44449c5697b326919703bac031cae7f60",
     "d75a980182b10ab7d54bfed3c964073a0ee172f3daa62325af021a68f707511a", "",
     "e5564300c360ac729086e2cc806e828a84877f1eb8e5d974d873e06522490155"
     "5fb8821590a33bacc61e39701cf9b46bd25bf5f0595bbe24655141438e7a100b"),
    ("4ccd089b28ff96da9db6c346ec114e0f5b8a319f35aba624da8cf6ed4fb8a6fb",
     "3d4017c3e843895a92b70aa74d1b7ebc9c982ccf2ec4968cc0cd55f12af4660c", "72",
     "92a009a9f0d4cab8720e820b5f642540a2b27b5416503f8fb3762223ebdb69da"
     "085ac1e43e15996e458f3613d0f11d8c387b2eaeb4302aeeb00d291612bb0c00"),
    ("c5aa8df43f9f837bedb7442f31dcb7b166d38535076f094b85ce3a2e0b4458f7",
     "fc51cd8e6218a1a38da47ed00230f0580816ed13ba3303ac5deb911548908025", "af82",
     "6291d657deec24024827e69c3abe01a30ce548a284743a445e3680d7db5ac3ac"
     "18ff9b538d16f290ae67f760984dc6594a7c15e9716ed28dc027beceea1ec40a"),
]

# The leaves and roots of RFC 6962's test trees (from memory, recomputed); RFC 9162 keeps the same hashes.
LEAVES = [bytes.fromhex(text) for text in (
    "", "00", "10", "2021", "3031", "40414243", "5051525354555657", "606162636465666768696a6b6c6d6e6f")]
ROOTS = [
    "e3b0c44298fc1c149afbf4c8996fb92427ae41e4649b934ca495991b7852b855",
    "6e340b9cffb37a989ca544e6bb780a2c78901d3fb33738768511a30617afa01d",
    "fac54203e7cc696cf0dfcb42c92a1d9dbaf70ad9e621f4bd8d98662f00e3c125",
    "aeb6bcfe274b70a14fb067a5e5578264db0fa9b51af5e0ba159158f329e06e77",
    "d37ee418976dd95753c1c73862b9398fa2a2cf9b4ff0fdfe8b30cd95209614b7",
    "4e3bbb1f7b478dcfe71fb631631519a3bca12c9aefca1612bfce4c13a86264d4",
    "76e67dadbcdf1e10e1b74ddc608abd2f98dfb16fbce75277b5232a127f2087ef",
    "ddb89be403809e325750d3d263cd78929c2942b7942a34b77e122c9594a74c8c",
    "5dc9da79a70659a9ad559cb701ded9a2ab9d823aad2f4960cfe370eff4604328",
]

# RFC 8785 appendix B (from memory): IEEE 754 bits and the text.
NUMBERS = [
    ("0000000000000000", "0"), ("8000000000000000", "0"), ("0000000000000001", "5e-324"),
    ("8000000000000001", "-5e-324"), ("7fefffffffffffff", "1.7976931348623157e+308"),
    ("ffefffffffffffff", "-1.7976931348623157e+308"), ("4340000000000000", "9007199254740992"),
    ("c340000000000000", "-9007199254740992"), ("4430000000000000", "295147905179352830000"),
    ("44b52d02c7e14af5", "9.999999999999997e+22"), ("44b52d02c7e14af6", "1e+23"),
    ("44b52d02c7e14af7", "1.0000000000000001e+23"), ("444b1ae4d6e2ef4e", "999999999999999700000"),
    ("444b1ae4d6e2ef4f", "999999999999999900000"), ("444b1ae4d6e2ef50", "1e+21"),
    ("3eb0c6f7a0b5ed8c", "9.999999999999997e-7"), ("3eb0c6f7a0b5ed8d", "0.000001"),
    ("41b3de4355555553", "333333333.3333332"), ("41b3de4355555554", "333333333.33333325"),
    ("41b3de4355555555", "333333333.3333333"), ("41b3de4355555556", "333333333.3333334"),
    ("41b3de4355555557", "333333333.33333343"), ("becbf647612f3696", "-0.0000033333333333333333"),
    ("43143ff3c1cb0959", "1424953923781206.2"),
]


@pytest.mark.parametrize("private, public, message, signature", ED25519)
def test_ed25519_keys_and_signatures_are_those_of_rfc_8032(private, public, message, signature) -> None:
    """The key pair and the signature must be those of RFC 8032 section 7.1, bit for bit."""
    signer = Signer.from_seed("rfc", bytes.fromhex(private))
    assert signer.verifier.public_key.hex() == public
    assert signer.sign(bytes.fromhex(message)).hex() == signature
    Verifier("rfc", bytes.fromhex(public)).check(bytes.fromhex(message), bytes.fromhex(signature))


def test_ed25519_refuses_a_signature_with_the_group_order_added() -> None:
    """S + L signs the same equation; RFC 8032 section 5.1.7 demands S < L, else signatures are malleable."""
    _, public, message, signature = ED25519[2]
    order = 2**252 + 27742317777372353535851937790883648493
    data = bytes.fromhex(signature)
    shifted = data[:32] + (int.from_bytes(data[32:], "little") + order).to_bytes(32, "little")
    with pytest.raises(ProofError):
        Verifier("rfc", bytes.fromhex(public)).check(bytes.fromhex(message), shifted)


@pytest.mark.parametrize("size", range(9))
def test_merkle_roots_are_those_of_rfc_6962(size) -> None:
    """The roots of the first 0 to 8 leaves must be the known ones, by the definition and from stored hashes."""
    stored: dict[tuple[int, int], bytes] = {}

    def read(places):
        return [stored[place] for place in places]

    for number, leaf in enumerate(LEAVES[:size]):
        for level, index, value in merkle.append_nodes(number, merkle.leaf_hash(leaf), read):
            stored[level, index] = value
    assert merkle.root_of([merkle.leaf_hash(leaf) for leaf in LEAVES[:size]]).hex() == ROOTS[size]
    assert merkle.root(size, read).hex() == ROOTS[size]


def test_merkle_proofs_have_the_shape_of_the_example_of_rfc_9162() -> None:
    """Section 2.1.5 (from memory) names the nodes of every proof of its seven-leaf tree; ours must be these nodes."""
    d = [merkle.leaf_hash(leaf) for leaf in LEAVES[:7]]
    a, b, c, e, f, j = d[0], d[1], d[2], d[4], d[5], d[6]
    g, h, i = merkle.node_hash(a, b), merkle.node_hash(c, d[3]), merkle.node_hash(e, f)
    k, l = merkle.node_hash(g, h), merkle.node_hash(i, j)
    stored = {(0, n): leaf for n, leaf in enumerate(d)} | {(1, 0): g, (1, 1): h, (1, 2): i, (2, 0): k}

    def read(places):
        return [stored[place] for place in places]

    assert merkle.root(7, read) == merkle.node_hash(k, l)
    assert merkle.prove_inclusion(0, 7, read) == [b, h, l]
    assert merkle.prove_inclusion(3, 7, read) == [c, g, l]
    assert merkle.prove_inclusion(4, 7, read) == [f, j, k]
    assert merkle.prove_inclusion(6, 7, read) == [i, k]
    assert merkle.prove_consistency(3, 7, read) == [c, d[3], g, l]
    assert merkle.prove_consistency(4, 7, read) == [l]
    assert merkle.prove_consistency(6, 7, read) == [i, j, k]


@pytest.mark.parametrize("bits, text", NUMBERS)
def test_numbers_are_written_as_rfc_8785_writes_them(bits, text) -> None:
    """Every number of appendix B must be written as there, and be read back as the same double."""
    value = struct.unpack(">d", bytes.fromhex(bits))[0]
    assert canonical.canonical_bytes(value) == text.encode()
    assert canonical.parse(text.encode(), require_canonical=True) == value


@pytest.mark.parametrize("bits", ["7fffffffffffffff", "7ff0000000000000", "fff0000000000000"])
def test_nan_and_infinity_have_no_canonical_form(bits) -> None:
    """RFC 8785 section 3.2.2.3: NaN and infinities must be refused."""
    with pytest.raises(InputError):
        canonical.canonical_bytes(struct.unpack(">d", bytes.fromhex(bits))[0])


def test_the_example_of_rfc_8785_section_3_2() -> None:
    """Numbers, escapes and literals of the running example (from memory) must come out as printed."""
    given = (rb'{"numbers": [333333333.33333329, 1E30, 4.50, 2e-3, 0.000000000000000000000000001],'
             rb'"string": "\u20ac$\u000F\u000aA' rb"'" rb'\u0042\u0022\u005c\\\"\/", "literals": [null, true, false]}')
    printed = ('{"literals":[null,true,false],"numbers":[333333333.3333333,1e+30,4.5,0.002,1e-27],'
               '"string":"\u20ac$\\u000f\\nA' "'" 'B\\"\\\\\\\\\\"/"}').encode()
    assert canonical.canonical_bytes(canonical.parse(given)) == printed


def test_keys_are_sorted_by_utf_16_units_as_in_rfc_8785_section_3_2_3() -> None:
    """The sorting example (from memory): a character outside the basic plane sorts by surrogates, before U+FB33."""
    given = (rb'{"\u20ac":"Euro Sign","\r":"Carriage Return","\ufb33":"Hebrew Letter Dalet With Dagesh","1":"One",'
             rb'"\ud83d\ude00":"Emoji: Grinning Face","\u0080":"Control",'
             rb'"\u00f6":"Latin Small Letter O With Diaeresis"}')
    written = canonical.canonical_bytes(canonical.parse(given))
    assert list(canonical.parse(written).values()) == [
        "Carriage Return", "One", "Control", "Latin Small Letter O With Diaeresis", "Euro Sign",
        "Emoji: Grinning Face", "Hebrew Letter Dalet With Dagesh"]


@pytest.mark.parametrize("body, encoded", [
    (b'{"hello": "world"}\n', "RK/0qy18MlBSVnWgjwz6lZEWjP/lF5HF9bvEF8FabDg="),
    (b'{"hello": "world"}', "X48E9qOokqqrvdts8nOJRJN3OWDUoyWxBf7kbu9DBPE="),
])
def test_digests_are_those_of_rfc_9530(body, encoded) -> None:
    """The sha-256 of the example body is, in hexadecimal, our digest text, and in base64 the header field we send."""
    assert digest_field(hashlib.sha256(body).digest()) == f"sha-256=:{encoded}:"
    assert canonical.bytes_digest(body) == f"sha256:{base64.b64decode(encoded).hex()}"


def test_sha_512_digest_of_rfc_9530() -> None:
    """The sha-512 example of RFC 9530 must be reproduced by the library that makes our digests."""
    assert base64.b64encode(hashlib.sha512(b'{"hello": "world"}\n').digest()).decode() == (
        "YMAam51Jz/jOATT6/zvHrLVgOYTGFy1d6GJiOHTohq4yP+pgk4vf2aCsyRZOtw8MjkM7iw7yZ/WkppmM44T3qg==")
