"""What an error of the S3 client means: whose fault it is, whether a second try may mend it, what to do.

Messages are made of error codes, class names and addresses alone. The text of a server or of a library is never
passed on, since it may hold signatures, tokens or addresses with passwords.
"""

from __future__ import annotations

import asyncio

import aiohttp
from botocore import exceptions as boto
from botocore.httpchecksum import FlexibleChecksumError
from botocore.parsers import ResponseParserError

from shardfold.errors import AccessDenied, InputError, NothingToRead, ShardfoldError, StorageFailed
from shardfold.store_promises import Busy, Transient

_NO_CREDENTIALS = (
    boto.NoCredentialsError,
    boto.PartialCredentialsError,
    boto.CredentialRetrievalError,
    boto.TokenRetrievalError,
    boto.SSOError,
    boto.ProfileNotFound,
    boto.NoAuthTokenError,
)
_NO_ANSWER = (
    boto.HTTPClientError,
    boto.ConnectionError,
    ResponseParserError,
    FlexibleChecksumError,
    aiohttp.ClientError,
    asyncio.TimeoutError,
    OSError,
)
_DENIED_CODES = {"ExpiredToken", "InvalidAccessKeyId", "InvalidToken", "SignatureDoesNotMatch", "TokenRefreshRequired"}
_BUSY_CODES = {"SlowDown", "RequestTimeout", "InternalError", "ServiceUnavailable", "ConditionalRequestConflict"}
_BUSY_STATUS = {408, 409, 425, 429, 500, 502, 503, 504}

_CHAIN = (
    "credentials come from the usual chain: AWS_ACCESS_KEY_ID and AWS_SECRET_ACCESS_KEY, AWS_PROFILE and its files, "
    "the role of the container or machine; for a public bucket set storage.anonymous"
)


def http_status(error: boto.ClientError) -> int:
    """Return the HTTP status of an answer that is an error."""
    return int(error.response.get("ResponseMetadata", {}).get("HTTPStatusCode", 0))


def error_code(error: boto.ClientError) -> str:
    """Return the service's word for an error, such as ``NoSuchKey``; only its status where the answer has no body."""
    code = str(error.response.get("Error", {}).get("Code", ""))
    return code if code.isalpha() else ""


def is_missing_object(error: boto.ClientError) -> bool:
    """Whether the answer says that the object, not the bucket, is missing."""
    return http_status(error) == 404 and error_code(error) != "NoSuchBucket" and error.operation_name != "HeadBucket"


def translate(error: Exception, place: str) -> ShardfoldError | None:
    """Return an error in the package's words, or ``None`` where it is none of the client's (a bug).

    Parameters
    ----------
    error : Exception
        What the S3 client raised.
    place : str
        The object's full name.
    """
    if isinstance(error, boto.ClientError):
        return _answered(error, place)
    kind = type(error).__name__
    if isinstance(error, _NO_CREDENTIALS):
        return AccessDenied("no usable credentials", where=place, got=kind, remedy=_CHAIN)
    if isinstance(error, boto.SSLError):
        remedy = "mend the certificate, name its authority in AWS_CA_BUNDLE, or correct the scheme of the endpoint"
        return StorageFailed("the service cannot prove who it is", where=place, got=kind, remedy=remedy)
    if isinstance(error, _NO_ANSWER):
        remedy = "check that the service runs and that its endpoint is the one named"
        return Transient("the service did not answer, or broke off", where=place, got=kind, remedy=remedy)
    if isinstance(error, boto.ParamValidationError | boto.InvalidRegionError | boto.UnsupportedS3ConfigurationError):
        return InputError("no such bucket, key or region can exist", where=place, got=kind)
    if isinstance(error, boto.BotoCoreError):
        return StorageFailed("the S3 client failed", where=place, got=kind)
    return None


def _answered(error: boto.ClientError, place: str) -> ShardfoldError:
    status, code = http_status(error), error_code(error)
    got = f"HTTP {status} {code}".strip()
    if status in (401, 403) or code in _DENIED_CODES:
        return AccessDenied("the service denies access", where=place, got=got, remedy=_CHAIN)
    if status in _BUSY_STATUS or code in _BUSY_CODES:
        return Busy("the service is busy or broken", where=place, got=got, remedy="wait, then repeat")
    if is_missing_object(error):
        return NothingToRead("there is no such object", where=place, got=got)
    if status == 404:
        return NothingToRead("there is no such bucket", where=place, got=got, remedy="correct it, or make the bucket")
    remedy = "check region and endpoint" if status in (301, 307, 400) else ""
    return StorageFailed("the service refused the request", where=place, got=got, remedy=remedy)
