"""Text of the pages that comes out of the schema and the registries, as reStructuredText.

`PARTS` maps a name to a function. In a page, ``.. generated:: NAME`` stands for its text (see conf.py).
``python docs/generate.py NAME`` prints it.
"""

from __future__ import annotations

import sys
from collections.abc import Callable, Iterable, Sequence

from realize.batch.jobs import JOB_FIELDS, STEP_FIELDS, verbs_of_jobs
from realize.batch.naming import PLACEHOLDERS
from realize.conversions.route import DOUBLE_ROWS, ROWS
from realize.files.registry import FORMATS
from realize.files.table_names import ROLES, UNITS
from realize.fitting.registry import METHODS as FITTING
from realize.forms.registry import TABLE
from realize.reduction.registry import methods as reductions
from realize.schema import (
    BASES,
    CLAIMS,
    COMMON_FIELDS,
    COMMON_OPTIONS,
    EXIT_STATUSES,
    FORMAT_VERSION,
    FORMS,
    HOLDS,
    KINDS,
    RECEIPT_OPTIONS,
    STRUCTURED,
    VERBS,
    Option,
)

#: What an option takes -> how its value is written.
WRITTEN = {
    "flag": "",
    "switch": "",
    "choice": "one of the names",
    "text": "text",
    "number": "a number greater than zero",
    "integer": "a whole number",
    "error": "a number, or per cent: ``0.01`` or ``1%``",
    "band": "two frequencies: ``1Hz,2.4kHz``, or plain numbers in rad/s",
    "frequencies": "frequencies with commas between them: ``10Hz,2.4kHz``, or plain numbers in rad/s",
    "order": "``N``, ``A..B`` or ``auto``",
    "time": "seconds, or with a suffix: ``0.002``, ``2ms``, ``150us``",
    "delay": "seconds as above, or ``auto``, ``auto-per-input``, ``auto-per-output``, ``auto-per-channel``",
    "roots": "complex numbers with commas between them, both members of a pair: ``-1,-2+3j,-2-3j``",
    "matrix": "a number, or rows with semicolons between them: ``1,2;3,4``",
    "columns": "names with commas between them",
    "weights": "positive numbers with commas between them",
    "rate": "samples a second, or with a suffix: ``1000``, ``44.1kHz``",
    "share": "a number below one, or per cent: ``0.5`` or ``50%``",
    "path": "name of a file",
    "limit": "``NAME=VALUE``, a claim and a number; may be given several times",
}


def safe(text: str) -> str:
    """Return plain text with the characters escaped that reStructuredText would read as markup."""
    for mark in "\\*`|_":
        text = text.replace(mark, "\\" + mark)
    return text


def literal(text: object) -> str:
    """Return text in double backquotes."""
    return f"``{text}``"


def listed(names: Iterable[object]) -> str:
    """Return names in double backquotes with commas between them."""
    return ", ".join(literal(name) for name in names)


def table(head: Sequence[str], rows: Iterable[Sequence[str]], widths: Sequence[int] | None = None) -> str:
    """Return a list-table."""
    width = "auto" if widths is None else " ".join(map(str, widths))
    lines = [".. list-table::", "   :header-rows: 1", f"   :widths: {width}", ""]
    for row in [head, *rows]:
        for k, cell in enumerate(row):
            lines.append(f"   {'* -' if k == 0 else '  -'} {cell}".rstrip())
    return "\n".join(lines) + "\n"


def heading(text: str, mark: str = "-") -> str:
    """Return a title with its underline."""
    return f"{text}\n{mark * len(text)}\n"


def _yes(value: bool) -> str:
    return "yes" if value else "no"


def kinds() -> str:
    """Return a table of all kinds."""
    rows = [
        (f":ref:`{name} <kind-{name}>`", safe(kind.says), "yes" if kind.parametric else "no")
        for name, kind in KINDS.items()
    ]
    return table(("kind", "is", "response at any frequency"), rows)


def kind_fields() -> str:
    """Return a section for each kind with its fields."""
    parts = []
    for name, kind in KINDS.items():
        rows = [(literal(f.name), _yes(f.required), safe(f.says), safe(HOLDS[f.holds])) for f in kind.fields]
        parts += [f".. _kind-{name}:\n", heading(name), safe(kind.says) + "\n"]
        parts += [table(("field", "needed", "means", "holds"), rows, (15, 10, 35, 40))]
    return "\n".join(parts)


def common_fields() -> str:
    """Return a table of the fields that every kind has."""
    return table(("field", "holds"), [(literal(name), safe(says)) for name, says in COMMON_FIELDS.items()], (15, 85))


def format_version() -> str:
    """Return a sentence with the version of the file format."""
    return f"This page describes version {FORMAT_VERSION} of the format.\n"


def spelled(option: Option) -> str:
    """Return an option as it is typed."""
    if option.takes == "switch":
        return f"``--{option.name}`` / ``--no-{option.name}``"
    value = option.metavar or ("" if option.takes == "flag" else "|".join(option.choices) or "X")
    return literal(f"--{option.name} {value}".strip())


def option_table(options: Iterable[Option]) -> str:
    """Return a table of options."""
    rows = []
    for option in options:
        says = [safe(option.says)]
        if option.choices:
            says.append("Names: " + listed(option.choices))
        elif WRITTEN[option.takes]:
            says.append("Value: " + WRITTEN[option.takes])
        default = option.default
        if default is not None:
            says.append(
                "Default: " + literal({True: "on", False: "off"}[default] if isinstance(default, bool) else default)
            )
        rows.append((spelled(option), ". ".join(says) + "."))
    return table(("option", "does"), rows, (30, 70))


def verbs() -> str:
    """Return a section for each verb."""
    parts = []
    for name, verb in VERBS.items():
        usage = " ".join(["realize", name, *verb.arguments, "[options]"])
        if verb.makes_model or name in ("report", "demo"):
            usage += " [-o OUTPUT]" if name != "report" else " -o OUTPUT"
        parts += [f".. _verb-{name}:\n", heading(name), safe(verb.says) + "\n", f".. code-block:: text\n\n   {usage}\n"]
        if verb.options:
            parts.append(option_table(verb.options))
        more = "the options of every verb"
        if verb.makes_receipt:
            more = "the options of verbs that make a receipt, and " + more
        parts.append(f"It also takes {more} (below).\n")
    return "\n".join(parts)


def verb_summary() -> str:
    """Return a table of all verbs."""
    return table(
        ("verb", "does"), [(f":ref:`{name} <verb-{name}>`", safe(v.says)) for name, v in VERBS.items()], (20, 80)
    )


def common_options() -> str:
    """Return the options of every verb."""
    return option_table(COMMON_OPTIONS)


def receipt_options() -> str:
    """Return the options of verbs that make a receipt."""
    return option_table(RECEIPT_OPTIONS)


def exit_statuses() -> str:
    """Return a table of exit statuses."""
    return table(("status", "meaning"), [(str(code), safe(says)) for code, says in EXIT_STATUSES.items()], (10, 90))


def _limits(limits: dict[str, float]) -> str:
    words = {"convert": "every conversion", "convert:structured": "conversions to structured results"}
    return "; ".join(f"{value:g} for {words.get(key, key)}" for key, value in limits.items()) or "none"


def claims() -> str:
    """Return a table of all claims."""
    rows = [(literal(c.name), safe(c.unit), safe(c.says), _limits(c.limits)) for c in CLAIMS.values()]
    return table(("claim", "unit", "says", "default limit"), rows, (18, 10, 47, 25))


def bases() -> str:
    """Return a table of what a claim can be based on."""
    return table(("basis", "means"), [(literal(name), safe(says)) for name, says in BASES.items()], (15, 85))


def structured() -> str:
    """Return the kinds and forms that count as structured."""
    return listed(STRUCTURED) + "\n"


def forms() -> str:
    """Return the forms of a state-space result."""
    return listed(FORMS) + "\n"


def coordinate_forms() -> str:
    """Return a table of the forms that are changes of coordinates."""
    cells = [
        (f":doc:`{form.name} <{form.page}>`", safe(form.says), safe(form.source), literal(form.instead))
        for form in TABLE.values()
    ]
    return table(("form", "does", "source", "instead"), cells, (18, 40, 27, 15))


def _rows(rows: Iterable[object]) -> str:
    cells = [(literal(r.source), literal(r.target), "exact" if r.exact else "rounding", safe(r.says)) for r in rows]  # type: ignore[attr-defined]
    return table(("from", "to", "row is", "does"), cells, (22, 28, 12, 38))


def conversions() -> str:
    """Return the table of conversions."""
    return _rows(ROWS)


def double_conversions() -> str:
    """Return the table of conversions in double arithmetic."""
    return _rows(DOUBLE_ROWS)


def reduction_methods() -> str:
    """Return each method of reduction with its bound and its sources."""
    parts = []
    for method in reductions():
        parts += [heading(method.name), safe(method.says) + "\n"]
        parts.append(f"Bound: {safe(method.claim)}.\n" if method.claim else "No bound.\n")
        parts.append("Sources:\n")
        parts += [f"- {safe(source)}" for source in method.source]
        parts.append("")
    return "\n".join(parts)


def fit_methods() -> str:
    """Return each fitting method with its sources."""
    return "\n".join(f"{heading(m.name)}\n{safe(m.says)}\n\nSource: {safe(m.source)}.\n" for m in FITTING.values())


def formats() -> str:
    """Return a table of file formats."""
    import realize.files  # noqa: F401  registers the formats

    rows = []
    for row in FORMATS.values():
        cells = [literal(row.name), safe(row.says), listed(row.suffixes), _yes(row.can_read), _yes(row.can_write)]
        rows.append([*cells, listed(row.writes_kinds) or "every kind"])
    return table(("format", "is", "suffixes", "read", "written", "kinds written"), rows)


def column_names() -> str:
    """Return the words that say what a column of a table is."""
    return table(("column", "words"), [(role, listed(words)) for role, words in ROLES.items()], (20, 80))


def column_units() -> str:
    """Return the words that say the unit of a column."""
    spellings: dict[str, list[str]] = {}
    for word, unit in UNITS.items():
        spellings.setdefault(unit, []).append(word)
    return table(("unit", "spellings"), [(unit, listed(words)) for unit, words in spellings.items()], (20, 80))


#: What a field of a job file takes -> how its value is written.
IN_JOBS = {
    "patterns": "a text, or a list of texts",
    "failure": "one of ``stop``, ``set-aside``, ``keep``",
    "seconds": 'seconds, or a text with a suffix: ``0.5``, ``"200ms"``',
    "memory": 'a text such as ``"512MiB"`` or ``"2GiB"``',
    "limits": "a table of claims and numbers",
    "steps": "tables ``[[steps]]``",
    "pattern": "a text",
}


def _job_table(fields: dict[str, tuple[str, str]]) -> str:
    rows = [
        (literal(name), safe(says), IN_JOBS.get(takes, WRITTEN.get(takes, "")))
        for name, (takes, says) in fields.items()
    ]
    return table(("field", "means", "holds"), rows, (20, 50, 30))


def job_fields() -> str:
    """Return a table of the fields of a job file."""
    return _job_table(JOB_FIELDS)


def step_fields() -> str:
    """Return a table of the fields of a step beside the options of its verb."""
    return _job_table(STEP_FIELDS)


def job_verbs() -> str:
    """Return the verbs that a job file may use."""
    return listed(verbs_of_jobs()) + "\n"


def placeholders() -> str:
    """Return a table of what the name of an output may hold."""
    return table(
        ("text", "stands for"), [(literal(f"{{{name}}}"), safe(says)) for name, says in PLACEHOLDERS.items()], (20, 80)
    )


PARTS: dict[str, Callable[[], str]] = {
    function.__name__.replace("_", "-"): function
    for function in (
        kinds,
        kind_fields,
        common_fields,
        format_version,
        verbs,
        verb_summary,
        common_options,
        receipt_options,
        exit_statuses,
        claims,
        bases,
        structured,
        forms,
        coordinate_forms,
        conversions,
        double_conversions,
        reduction_methods,
        fit_methods,
        formats,
        column_names,
        column_units,
        job_fields,
        step_fields,
        job_verbs,
        placeholders,
    )
}


def text_of(name: str) -> str:
    """Return the text of one part; raises KeyError for a name that does not exist."""
    return PARTS[name]()


if __name__ == "__main__":
    for wanted in sys.argv[1:] or PARTS:
        print(text_of(wanted))
