"""Access tokens: made, listed, revoked. Each is an entry of the record; the secret is shown once and kept nowhere."""

from __future__ import annotations

from typing import Annotated

from fastapi import APIRouter, Path

from trapd.api.access import Administering, Token, Tokens
from trapd.api.answers import Answer
from trapd.api.bodies import TokenBody


def routes(tokens: Tokens) -> APIRouter:
    router = APIRouter(tags=["tokens"])

    @router.get("/v1/tokens", summary="The tokens in force; their secrets are not known here")
    async def listed(caller: Administering) -> Answer:
        return Answer({"tokens": [_shown(token) for token in tokens.list()]})

    @router.post("/v1/tokens", status_code=201, summary="A new token; the answer alone has its secret")
    def made(body: TokenBody, caller: Administering) -> Answer:
        secret, token = tokens.make(body.name, body.role, caller.name)
        return Answer({**_shown(token), "token": secret}, status_code=201)

    @router.delete("/v1/tokens/{name}", summary="Revoke a token, at once")
    def revoked(name: Annotated[str, Path(max_length=64)], caller: Administering) -> Answer:
        return Answer({"name": name, "entry": tokens.revoke(name, caller.name).seq})

    return router


def _shown(token: Token) -> dict[str, str | int]:
    return {
        "name": token.name,
        "role": token.role,
        "entry": token.entry,
        "time": token.time,
        "made_by": token.made_by,
    }
