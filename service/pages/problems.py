"""What the service says of each problem: the page behind the `type` of a problem."""

from collections.abc import Mapping
from dataclasses import asdict, dataclass
from html import escape

from service.representations.page import page


@dataclass(frozen=True, slots=True)
class ProblemPage:
    """One problem in a person's words."""

    title: str
    meaning: str
    remedy: str


def problem_page(code: str, status: int, *, root: str = "") -> str:
    """Return the page of the problem `code`, answered with `status`; `root` as for every page."""
    said = PROBLEM_PAGES[code]
    return page(
        said.title,
        f"<p><code>{escape(code)}</code>, status {status}</p>\n"
        f"<h2>What it means</h2><p>{escape(said.meaning)}</p>\n"
        f"<h2>What to do</h2><p>{escape(said.remedy)}</p>\n",
        root=root,
    )


def problem_record(code: str, status: int) -> dict[str, object]:
    """Return the same for a program."""
    return {"type": f"/problems/{code}", "code": code, "status": status, **asdict(PROBLEM_PAGES[code])}


def problem_index(statuses: Mapping[str, int], fault_codes: Mapping[str, str], *, root: str = "") -> str:
    """Return the page that lists every problem, and the codes inside `errors`."""
    rows = "".join(
        f'<dt><a href="{escape(root)}/problems/{code}"><code>{code}</code></a> ({status})</dt>'
        f"<dd>{escape(PROBLEM_PAGES[code].title)}</dd>\n"
        for code, status in statuses.items()
    )
    codes = "".join(f"<dt><code>{code}</code></dt><dd>{escape(words)}</dd>\n" for code, words in fault_codes.items())
    return page(
        "Problems",
        "<p>Every error is <code>application/problem+json</code>. Its <code>type</code> is one of these "
        "pages, its <code>instance</code> is the request id, and its <code>errors</code> say what is wrong "
        "and where: a JSON pointer into your own request, the name of a parameter or a header, or a row "
        f"and column of a table.</p>\n<dl>{rows}</dl>\n<h2>Codes inside errors</h2><p>Besides the code of "
        f"the problem itself and those of single checks:</p><dl>{codes}</dl>\n",
        root=root,
    )


PROBLEM_PAGES = {
    "malformed": ProblemPage(
        "The request cannot be read",
        "The body is not what its Content-Type says: broken JSON, a table that is cut short, base64 or "
        "UTF-8 that does not decode, or a header that cannot be read.",
        "Look at the place that errors name. A file that was cut short in transfer must be sent again; a "
        "wrong Content-Type must be corrected.",
    ),
    "digest_mismatch": ProblemPage(
        "The body is not the one that its digest was made of",
        "The Content-Digest header gives a digest of another body: something between you and the service "
        "changed or lost bytes, or the digest was made of something else.",
        "Send the request again. If it fails again, compare the digest with one made of the very bytes that are sent.",
    ),
    "invalid_value": ProblemPage(
        "A value is not allowed",
        "The request can be read, but something in it is missing, misspelt, of the wrong type, out of its "
        "range or does not fit the rest of the request.",
        "Each entry of errors points at one value and says what is needed there. Nothing was computed.",
    ),
    "not_defined": ProblemPage(
        "The figure does not exist for these losses",
        "The request is sound, but a figure that it asks for has no value here, such as an allocation by "
        "covariance of losses that never vary.",
        "Ask for another measure or rule, or leave out what errors points at.",
    ),
    "limit_exceeded": ProblemPage(
        "A limit of this server was passed",
        "The request counts more of something than this server is set to take. The member limit says which "
        "limit, what it allows and what was asked.",
        "Send less, or ask the operator to raise the setting that limit names. GET /v1/limits lists all limits.",
    ),
    "too_large": ProblemPage(
        "The body is too large",
        "The body has more bytes than this server reads. The member limit says how many are allowed.",
        "Send the table as packed values, Arrow or Parquet, which take fewer bytes than JSON or CSV, or "
        "ask the operator to raise the setting that limit names.",
    ),
    "too_long": ProblemPage(
        "The work takes too long",
        "The calculation was stopped when the time allowed was over: the server's own limit, or the "
        "shorter one of a Prefer: wait header. The same request would fail again.",
        "Ask for fewer measures, rules or scenarios, allow more time in Prefer, or ask the operator to "
        "raise the setting that limit names.",
    ),
    "not_found": ProblemPage(
        "There is nothing here",
        "No page, calculation or form of an answer has this path.",
        "Compare the path with the list at /docs. Paths have no slash at the end.",
    ),
    "method_not_allowed": ProblemPage(
        "This path does not take this method",
        "The path exists, but not with the method of the request. The header Allow lists the methods that it takes.",
        "Calculations take POST; everything else takes GET.",
    ),
    "not_acceptable": ProblemPage(
        "No form of the answer suits",
        "The Accept header of the request allows none of the forms that this path can answer in.",
        "Send one of the media types named in detail, or leave Accept out for JSON.",
    ),
    "unsupported_media_type": ProblemPage(
        "The body has a type that is not read here",
        "The Content-Type of the request is not one that this path reads, or its Content-Encoding is not identity.",
        "Send one of the types listed at /docs, uncompressed, with its Content-Type.",
    ),
    "losses_changed": ProblemPage(
        "The losses have changed",
        "The digest that the request names is not that of the losses it was to be applied to.",
        "Fetch the losses or their digest again and repeat the request on them.",
    ),
    "busy": ProblemPage(
        "The service is busy",
        "All places to compute and to wait are taken. The request itself is in order and was not begun.",
        "Send the same request again after the seconds that Retry-After names. Repeating a calculation is always safe.",
    ),
    "cancelled": ProblemPage(
        "The caller left",
        "The connection was closed before the answer was there, so the work was stopped. This stands in logs only.",
        "Nothing, or keep the connection open until the answer has come.",
    ),
    "internal": ProblemPage(
        "The service failed",
        "Something went wrong that is not the fault of the request. Nothing of it is shown here.",
        "Report the request id, which the answer carries as instance and X-Request-ID: it finds the line "
        "in the service's log.",
    ),
}
"""Code of a problem to its page. Every class of error has one."""
