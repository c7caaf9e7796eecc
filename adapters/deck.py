"""Input files of a program, written from templates."""

from __future__ import annotations

import re
import string
from collections.abc import Mapping, Sequence
from pathlib import Path, PurePosixPath
from typing import Annotated, Any, Literal

from pydantic import AfterValidator, BaseModel, ConfigDict, model_validator

from nipc.arrays import FloatArray
from nipc.errors import InputError, PropagatorError


def _inside(name: str) -> str:
    path = PurePosixPath(name.replace("\\", "/"))
    unfit = not path.name or path.is_absolute() or ".." in path.parts
    if unfit or ":" in name or any(ord(c) < 32 for c in name):
        raise ValueError(
            f"{name!r} does not stay in the run's scratch folder: give a plain relative name"
        )
    if "$" in name.replace("$run", "", 1):
        raise ValueError(f"{name!r}: the only $ that a file name may have is $run, in a batch")
    return name


def _format(value: str) -> str:
    if not re.fullmatch(r"%[-+ 0#]*\d*(\.\d+)?[eEfFgG]", value):
        raise ValueError(f"{value!r} does not print one number; write for example %.15e or %12.5f")
    return value


ScratchName = Annotated[str, AfterValidator(_inside)]
NumberFormat = Annotated[str, AfterValidator(_format)]


class InputFile(BaseModel):
    """One input file, from a template beside the study or from text in the study.

    language "plain" knows $name, ${name} and $$ for a dollar sign; "jinja" is Jinja's, in its
    sandbox. In a batch the file is written once, or with $run in its name once a run; with `repeat`
    the template is a card that is written once a run between `head` and `tail`.
    """

    model_config = ConfigDict(extra="forbid", frozen=True)

    file: ScratchName
    template: str | None = None
    text: str | None = None
    language: Literal["plain", "jinja"] = "plain"
    repeat: bool = False
    head: str = ""
    tail: str = ""

    @model_validator(mode="after")
    def _one(self) -> InputFile:
        if (self.template is None) == (self.text is None):
            raise ValueError("give one of template and text")
        if (self.head or self.tail) and not self.repeat:
            raise ValueError("head and tail stand around a card: they need repeat = true")
        if self.repeat and "$run" in self.file:
            raise ValueError("a file with $run in its name is written once a run already")
        return self


class Numbers:
    """How numbers are printed: a format for all and some for single names."""

    def __init__(self, style: str, styles: Mapping[str, str], fortran: bool) -> None:
        self.style, self.styles, self.fortran = style, dict(styles), fortran

    def __call__(self, value: float, name: str = "") -> str:
        style = self.styles.get(name, self.style)
        text = style % value
        width = re.match(r"%[-+ 0#]*(\d*)", style)
        if width and width[1] and len(text) > int(width[1].lstrip("0") or 0):
            raise PropagatorError(
                f"{name or 'a number'} = {value!r} does not fit into its field: {style} prints "
                f"{text!r}, {len(text)} characters"
            )
        return text.replace("e", "D").replace("E", "D") if self.fortran else text


class Deck:
    """A template that was read once and is filled in for each run."""

    def __init__(self, file: InputFile, folder: Path) -> None:
        self.file = file
        self.name = file.template or file.file
        self.source = file.text if file.text is not None else _read(folder, file.template or "")

    def check(self, shared: set[str], own: set[str], batch: bool) -> None:
        """InputError when the template names what there is not.

        `own` words are of a run; in a batch a file that is written once has only the `shared` ones.
        """
        once = batch and not self.file.repeat and "$run" not in self.file.file
        if self.file.language == "jinja":
            names, known = _jinja_names(self.source, self.name), shared | own
            known |= {"runs", "times", "forcing", "number"}
            self._refuse(names - known, known, "")
            return
        parts = [(self.source, set() if once else own)]
        parts += [(text, set()) for text in (self.file.head, self.file.tail)]
        for text, more in parts:
            template = _Plain(text)
            if not template.is_valid():
                raise InputError(f"template {self.name}: a lone $; write $$ for a dollar sign")
            names = set(template.get_identifiers())
            hint = ""
            if once and names & own:
                hint = "; in a batch only a card (repeat = true) or a file with $run has them"
            self._refuse(names - shared - more, shared | more, hint)

    def _refuse(self, unknown: set[str], known: set[str], hint: str) -> None:
        if unknown:
            raise InputError(
                f"template {self.name}: unknown {', '.join('$' + u for u in sorted(unknown))}; "
                f"known: {', '.join('$' + k for k in sorted(known))}{hint}"
            )

    def fill(self, shared: Mapping[str, str], own: Sequence[Mapping[str, str]]) -> str:
        """The file's text for these runs, plain."""
        if not self.file.repeat:
            words = {**shared, **own[0]} if len(own) == 1 else shared
            return _Plain(self.source).substitute(words)
        cards = [_Plain(self.source).substitute({**shared, **words}) for words in own]
        head, tail = (_Plain(t).substitute(shared) for t in (self.file.head, self.file.tail))
        return head + "".join(cards) + tail

    def fill_jinja(self, values: Mapping[str, Any]) -> str:
        """The file's text from numbers rather than words."""
        import jinja2

        try:
            return _jinja().from_string(self.source).render(values)
        except jinja2.TemplateError as error:
            raise PropagatorError(f"template {self.name}: {error.message}") from None
        except (ArithmeticError, TypeError, ValueError, LookupError, MemoryError) as error:
            raise PropagatorError(f"template {self.name}: {error}") from None


class _Plain(string.Template):
    idpattern = r"(?a:[_a-zA-Z][_a-zA-Z0-9]*)"


def _read(folder: Path, name: str) -> str:
    try:
        return (folder / name).read_text(encoding="utf-8")
    except OSError as error:
        raise InputError(f"cannot read the template {name!r}: {error.strerror}") from None
    except UnicodeDecodeError as error:
        raise InputError(f"the template {name!r} is not UTF-8 text (byte {error.start})") from None


def _jinja() -> Any:
    import jinja2
    from jinja2.sandbox import ImmutableSandboxedEnvironment

    return ImmutableSandboxedEnvironment(
        undefined=jinja2.StrictUndefined, keep_trailing_newline=True, autoescape=False
    )


def _jinja_names(source: str, name: str) -> set[str]:
    import jinja2
    from jinja2 import meta

    try:
        return set(meta.find_undeclared_variables(_jinja().parse(source)))
    except jinja2.TemplateSyntaxError as error:
        raise InputError(f"template {name}, line {error.lineno}: {error.message}") from None


def table_text(times: FloatArray, values: FloatArray, shown: Numbers) -> str:
    """A table of t, xi_1 ... xi_J, a row a time."""
    if not shown.styles and not shown.fortran:
        line = " ".join([shown.style] * (1 + values.shape[1])) + "\n"
        return "".join(
            line % (t, *row) for t, row in zip(times.tolist(), values.tolist(), strict=True)
        )
    rows = zip(times.tolist(), values.tolist(), strict=True)
    return "".join(" ".join([shown(t), *map(shown, row)]) + "\n" for t, row in rows)
