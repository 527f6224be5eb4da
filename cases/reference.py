"""The case file's vocabulary as text, written from the schema."""

from __future__ import annotations

from .fields import in_words
from .quantity import KINDS
from .schema import CONDUCTORS, REPEATED, SINGLE, TOP, Key, Table

_EXAMPLES = {
    "text": '"text"',
    "flag": "true",
    "count": "17",
    "choice": '"word"',
    "wave": '"1 @ 90 deg"',
    "along": '"3 mm" or 0.5',
    "co": '"x" or "45 deg"',
    "any": '"50 ohm"',
}


def case_reference() -> str:
    """Every table and key of the case file in Markdown: meaning, form, default, range."""
    parts = [_section(TOP.title, TOP)]
    parts.append("### [parameters]\n\nNames of your own, numbers or quantities, usable in every quantity.\n")
    parts += [_section(table.title, table) for table in SINGLE.values()]
    parts += [_section(f'[[conductor]] kind = "{kind}"', table) for kind, table in CONDUCTORS.items()]
    parts += [_section(table.title, table) for table in REPEATED.values() if isinstance(table, Table)]
    return "\n".join(parts)


def _section(title: str, table: Table) -> str:
    keys = table.keys.items()
    rows = [f"| `{name}` | {_form(key)} | {_default(key)} | {_meaning(key)} |" for name, key in keys]
    head = "| Key | Written | Default | Meaning |\n|---|---|---|---|\n"
    return f"### {title}\n\n{table.text}\n\n{head}" + "\n".join(rows) + "\n"


def _form(key: Key) -> str:
    if key.choices:
        return ", ".join(f'`"{word}"`' for word in key.choices)
    one = _EXAMPLES.get(key.kind) or (
        KINDS[key.kind][1] if key.kind == "ratio" else f'"{KINDS[key.kind][1]}"'
    )
    for size in reversed(key.shape):
        one = f"[{one}, ...]" if not isinstance(size, int) else "[" + ", ".join([one] * size) + "]"
    return f"`{one}`"


def _default(key: Key) -> str:
    if key.required:
        return "required"
    if key.default is None or key.default == "":
        return ""
    return f"`{str(key.default).lower() if key.kind == 'flag' else key.default}`"


def _meaning(key: Key) -> str:
    limits = []
    if key.above is not None and key.above != 0:
        limits.append(f"more than {in_words(key.above, key.kind)}")
    if key.low is not None:
        limits.append(f"from {in_words(key.low, key.kind)}")
    if key.high is not None:
        limits.append(f"up to {in_words(key.high, key.kind)}")
    return key.text + (f" Range: {' '.join(limits)}." if limits else "")
