"""The public keys with which anyone can check the seal of a limits document."""

from __future__ import annotations

from ...documents.seal import ALGORITHM
from ..contract import Contract
from ..fields import AnswerShape, ObjectList, StrictString

TAG = "Sealing"


class SealingKey(AnswerShape):
    """A public key, as RFC 7517 and RFC 8037 have it."""

    kty = StrictString(required=True, metadata={"description": "Kind of the key: OKP."})
    crv = StrictString(required=True, metadata={"description": "Its curve: Ed25519."})
    kid = StrictString(required=True, metadata={"description": "Its id: `key_id` of the seals it is for."})
    use = StrictString(required=True, metadata={"description": "What it is for: sig, signatures."})
    alg = StrictString(
        required=True, metadata={"description": f"The algorithm of the signatures: {ALGORITHM}."}
    )
    x = StrictString(required=True, metadata={"description": "The public key, base64url."})


class SealingKeys(AnswerShape):
    """The public keys of the seals that this service makes or takes; a JWK set."""

    keys = ObjectList(
        SealingKey, required=True, metadata={"description": "Each key; none where documents are not sealed."}
    )


def register(contract: Contract) -> None:
    """Binds the list of public keys."""
    contract.tag(TAG, "How a limits document proves that it is as it was issued.")
    published = {"keys": contract.seals.published}
    contract.operation(
        "GET",
        "/.well-known/jwks.json",
        operation_id="getSealingKeys",
        tag=TAG,
        summary="Public keys of the seals",
        description="A JWK set (RFC 7517) with every key whose seals this service takes, that of its own seals among "
        "them. A seal is a detached JWS (RFC 7515, RFC 7797) by Ed25519 over the RFC 8785 form of the limits document "
        "without its member `seal`.",
        response=SealingKeys(),
        computes=False,
    )(lambda: published)
