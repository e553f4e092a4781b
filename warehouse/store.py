"""An object store: the objects below one URL such as s3://bucket/prefix, and what its refusals mean.

An object is there whole or not at all, and parts are named after their bytes, so putting one twice changes nothing. Which
lake lies in a store is the business of `warehouse.cache`. Credentials, endpoint and region come from the usual AWS
variables of the environment, never from programme.toml.
"""

from __future__ import annotations

import hashlib
import os
import re
from collections.abc import Iterable, Iterator, Mapping
from concurrent.futures import ThreadPoolExecutor
from contextlib import contextmanager
from datetime import timedelta
from functools import cached_property
from pathlib import Path
from typing import Any, NamedTuple

from warehouse.parts import write_whole

CONNECT_S = 10
REQUEST_S = 120
RETRIES = 5
AT_ONCE = 8

_ERROR_CODE = re.compile(r"<Code>(\w+)</Code>")  # in the body of every error answer of S3
_NOT_ALLOWED = ("AccessDenied", "InvalidAccessKeyId", "SignatureDoesNotMatch")
_ROLES = ("AWS_WEB_IDENTITY_TOKEN_FILE", "AWS_CONTAINER_CREDENTIALS_RELATIVE_URI", "AWS_CONTAINER_CREDENTIALS_FULL_URI")


class StoreError(RuntimeError):
    """The store cannot be used; the message says what was found and what to do. Nothing was changed."""


class StoreAway(StoreError):
    """The store does not answer at the moment: the only trouble with it that can heal by itself."""


class StoreObject(NamedTuple):
    """One object of the store: its path as in the lake, its size, and when it was put, seconds since 1970."""

    path: str
    bytes: int
    put_s: float


class Store:
    """The objects below one URL such as s3://bucket/prefix. Making one asks for nothing over the network."""

    def __init__(self, url: str) -> None:
        try:
            import obstore
        except ImportError:
            raise StoreError(
                f"[lake] store = {url!r} needs the extra s3; install burdenline[s3], or empty the setting"
            ) from None
        if not _has_credentials() and os.environ.get("AWS_ENDPOINT_URL"):
            raise _without_credentials(url)
        self.url, self._obstore = url, obstore

    @property
    def delta_options(self) -> dict[str, str]:
        """What the ledger's Delta table needs beside the environment."""
        return {
            "allow_http": str(_is_plain_http()).lower(),
            "connect_timeout": f"{CONNECT_S}s",
            "timeout": f"{REQUEST_S}s",
            "max_retries": str(RETRIES),
        }

    @cached_property
    def _client(self) -> Any:
        return self._obstore.store.S3Store.from_url(
            self.url,
            client_options={
                "allow_http": _is_plain_http(),
                "connect_timeout": timedelta(seconds=CONNECT_S),
                "timeout": timedelta(seconds=REQUEST_S),
            },
            retry_config={"max_retries": RETRIES, "retry_timeout": timedelta(seconds=REQUEST_S)},
        )

    def size(self, path: str) -> int | None:
        """Bytes of an object, None where there is none."""
        with self.told():
            try:
                return self._obstore.head(self._client, path)["size"]
            except FileNotFoundError:
                return None

    def read(self, path: str) -> bytes | None:
        """Content of an object, None where there is none."""
        with self.told():
            try:
                return self._obstore.get(self._client, path).bytes().to_bytes()
            except FileNotFoundError as problem:
                if _code_of(problem) in ("", "NoSuchKey"):
                    return None
                raise

    def write(self, path: str, content: bytes) -> None:
        """Put an object; nobody ever sees half of it."""
        with self.told():
            self._obstore.put(self._client, path, content, use_multipart=False)

    def objects(self, folder: str) -> list[StoreObject]:
        """All objects below a folder."""
        with self.told():
            found = [row for rows in self._obstore.list(self._client, folder) for row in rows]
        return [StoreObject(row["path"], row["size"], row["last_modified"].timestamp()) for row in found]

    def remove(self, paths: list[str]) -> None:
        """Remove objects."""
        with self.told():
            if paths:
                self._obstore.delete(self._client, paths)

    def push(self, lake: Path, paths: Iterable[str]) -> None:
        """Put what the store does not hold yet; raises StoreError for what is neither here nor there."""

        def put(path: str) -> None:
            here, there_bytes = lake / path, self.size(path)
            if here.is_file():
                if there_bytes != here.stat().st_size:
                    self.write(path, here.read_bytes())
            elif there_bytes is None:
                raise StoreError(
                    f"{path} is neither in {lake} nor in {self.url}; write the part before it is committed"
                )

        _side_by_side(put, paths)

    def fetch(self, lake: Path, sha256_of: Mapping[str, str]) -> list[str]:
        """Get what the lake's folder lacks; returns the paths that the store does not hold as they were landed.

        An empty hash is not checked.
        """

        def get(path: str) -> bool:
            content, sha256 = self.read(path), sha256_of[path]
            if content is None or (sha256 and hashlib.sha256(content).hexdigest() != sha256):
                return False
            write_whole(lake / path, content)
            return True

        lacking = [path for path in sha256_of if not (lake / path).is_file()]
        return [path for path, is_here in zip(lacking, _side_by_side(get, lacking), strict=True) if not is_here]

    def changed(self, sha256_of: Mapping[str, str]) -> Iterator[tuple[str, str]]:
        """Paths whose object is not what was landed, with what is wrong; reads all of them."""

        def problem(path: str) -> str:
            content = self.read(path)
            if content is None:
                return "missing in the store"
            return "" if hashlib.sha256(content).hexdigest() == sha256_of[path] else "bytes changed in the store"

        return ((path, told) for path, told in zip(sha256_of, _side_by_side(problem, sha256_of), strict=True) if told)

    @contextmanager
    def told(self) -> Iterator[None]:
        """Turn what a client of the store raises in the body, ours or the ledger's, into one sentence."""
        try:
            yield
        except (self._obstore.exceptions.BaseError, OSError) as problem:
            raise self.sentence(problem) from None

    def sentence(self, problem: Exception) -> StoreError:
        """What to tell of an error of a client of the store."""
        code, errors = _code_of(problem), self._obstore.exceptions
        if not _has_credentials():
            return _without_credentials(self.url)
        if code == "NoSuchBucket":
            return StoreError(f"there is no bucket for {self.url}; make it, or mend [lake] store")
        if code in _NOT_ALLOWED or isinstance(problem, (errors.PermissionDeniedError, errors.UnauthenticatedError)):
            return StoreError(
                f"{self.url} refused the access ({code or 'forbidden'}); its AWS_ACCESS_KEY_ID must be allowed to "
                "list, get, put and delete there"
            )
        endpoint = os.environ.get("AWS_ENDPOINT_URL", "the region's own endpoint")
        return StoreAway(
            f"{self.url} does not answer at {endpoint} ({_last_words(problem)}); nothing was lost, run again later"
        )


def _side_by_side(do: Any, paths: Iterable[str]) -> list[Any]:
    with ThreadPoolExecutor(AT_ONCE) as pool:
        return list(pool.map(do, paths))


def _is_plain_http() -> bool:
    """Whether the environment names an endpoint without TLS, as a store on the own network may be."""
    return os.environ.get("AWS_ENDPOINT_URL", "").startswith("http://")


def _has_credentials() -> bool:
    has_keys = all(os.environ.get(name) for name in ("AWS_ACCESS_KEY_ID", "AWS_SECRET_ACCESS_KEY"))
    return has_keys or any(name in os.environ for name in _ROLES)


def _without_credentials(url: str) -> StoreError:
    """Where no keys are named the client asks the host's own role, which only a host of the cloud has."""
    return StoreError(
        f"no credentials for {url}: set AWS_ACCESS_KEY_ID and AWS_SECRET_ACCESS_KEY in the environment of this command"
    )


def _code_of(problem: Exception) -> str:
    found = _ERROR_CODE.search(str(problem))
    return found[1] if found else ""


def _last_words(problem: Exception) -> str:
    """What went wrong in the end; before it stand address, tries and seconds."""
    return _code_of(problem) or str(problem).partition("\n\n")[0].split(" - ")[-1].strip()[:100]
