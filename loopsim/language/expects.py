"""`expect ...`: a requirement, checked for what its measure needs and for the unit in which that is measured."""

from __future__ import annotations

import re

from loopsim.circuit import Relation, Requirement
from loopsim.expressions import Expression, LetRef
from loopsim.language import tree as t
from loopsim.language.draft import Frame
from loopsim.language.formulas import Scope, Typed, typed
from loopsim.language.measures import AT_STATES, COUNTS, FROM_A_START, MEASURES, MeasureForm
from loopsim.language.mistakes import nearest
from loopsim.language.source import Source
from loopsim.language.values import constant, limits, refuse_nets, toleranced, unit_in_words
from loopsim.units import Dimension, dimension_of, name_of


def add_requirement(statement: t.Expect, frame: Frame) -> None:
    """One requirement, checked."""
    scope, draft = frame.scope, frame.draft
    words = " ".join(word.text for word in statement.words)
    form = _form(words, statement, scope)
    target = _target_of(statement.target, scope) if statement.target is not None else None
    _check_target(form, words, statement, scope)
    _check_along(form, words, statement, scope)
    _check_clauses(words, statement, scope)
    along = _let_of(statement.along, frame) if statement.along is not None else None
    if statement.along is not None:
        _check_range(form, statement.along, frame)
    dimension, scale = _measured(form.dimension, target, along)
    relation = _relation(statement.relation, dimension, scale, words, frame)
    draft.requirements.append(
        Requirement(
            _label(words, statement, frame),
            words,
            relation,
            _text(scope.source, statement.place.line),
            target.tree if target else None,
            _written(scope.source, statement.target) if statement.target is not None else "",
            scale or name_of(dimension),
            statement.along.text if statement.along else None,
            statement.stable,
            _bindings(statement, frame),
            statement.start.text if statement.start else None,
            statement.over,
            scope.source.span(statement.place),
        )
    )


def _form(words: str, statement: t.Expect, scope: Scope) -> MeasureForm:
    if words not in MEASURES:
        where = statement.words[0].place.to(statement.words[-1].place)
        raise scope.mistake(
            "unknown-measure", f"there is no measure `{words}`", where, nearest(words, MEASURES)
        )
    return MEASURES[words]


def _target_of(formula: t.Formula, scope: Scope) -> Typed:
    target = typed(formula, scope)
    if target.scale:
        raise scope.mistake("degrees", "a temperature is given, not measured", formula.place)
    return target


def _check_target(form: MeasureForm, words: str, statement: t.Expect, scope: Scope) -> None:
    if form.target == "needed" and statement.target is None:
        raise scope.mistake("measure-target", f"`{words}` needs `of NET`", statement.words[-1].place)
    if form.target == "refused" and statement.target is not None:
        raise scope.mistake("measure-target", f"`{words}` takes no `of`", statement.target.place)


def _check_along(form: MeasureForm, words: str, statement: t.Expect, scope: Scope) -> None:
    if form.along == "needed" and statement.along is None:
        raise scope.mistake("measure-along", f"`{words}` needs `along LET`", statement.words[-1].place)
    if form.along == "refused" and statement.along is not None:
        raise scope.mistake("measure-along", f"`{words}` takes no `along`", statement.along.place)


def _check_clauses(words: str, statement: t.Expect, scope: Scope) -> None:
    """Error for a clause that would mean nothing with this measure."""
    if statement.stable and words not in AT_STATES:
        raise scope.mistake(
            "measure-clause", f"`{words}` takes no `in stable states`", statement.words[-1].place
        )
    if statement.start is None:
        return
    if words not in FROM_A_START:
        raise scope.mistake("measure-clause", f"`{words}` takes no `from`", statement.start.place)
    if statement.start.text != "off" and not re.fullmatch("[A-Z]+", statement.start.text):
        raise scope.mistake(
            "measure-clause", f"`{statement.start.text}` is no start", statement.start.place,
            "from off (the supplies come up), or from A, B, ... (a state by its letter)",
        )


def _check_range(form: MeasureForm, word: t.Word, frame: Frame) -> None:
    """A threshold needs a let that is traced over a range."""
    if form.dimension in ("along", "along difference") and frame.draft.parameters[word.text].low is None:
        raise frame.scope.mistake(
            "measure-along",
            f"`{word.text}` has no range to be traced over",
            word.place,
            f"let {word.text} = ... in LO .. HI",
        )


def _let_of(word: t.Word, frame: Frame) -> Typed:
    """A let, or the toleranced value `part.field`, by its name."""
    known = frame.draft.parameters
    if word.text not in known:
        raise frame.scope.mistake(
            "unknown-let", f"there is no let `{word.text}`", word.place, nearest(word.text, known)
        )
    unit = known[word.text].unit
    return Typed(LetRef(word.text), dimension_of(unit), unit if unit == "degC" else "")


def _measured(form: Dimension | str, target: Typed | None, along: Typed | None) -> tuple[Dimension, str]:
    """Dimension and scale in which a measure is given."""
    if form == "target" and target is not None:
        return target.dimension, ""
    if form == "along" and along is not None:
        return along.dimension, along.scale
    if form == "along difference" and along is not None:
        return along.dimension, ""
    if form == "ratio" and target is not None and along is not None:
        a, b = target.dimension, along.dimension
        return (a[0] - b[0], a[1] - b[1], a[2] - b[2], a[3] - b[3]), ""
    assert not isinstance(form, str)
    return form, ""


def _relation(written: t.Relation, dimension: Dimension, scale: str, words: str, frame: Frame) -> Relation:
    scope = frame.scope
    if written.form == "set" and words != "values":
        raise scope.mistake("relation", "a set in braces goes with `values` only", written.place)
    targets = [_target(item, dimension, scale, words, frame) for item in written.items]
    nominal = [value for value, _, _ in targets]
    if written.form == "range":
        low, high = (
            frame.draft.number(value, item.value, scope)
            for value, item in zip(nominal, written.items, strict=True)
        )
        if low > high:
            raise scope.mistake("relation", "the range has to rise", written.items[0].value.place)
        return Relation("range", ((None, nominal[0], nominal[1]),))
    if written.form in ("below", "above"):
        return Relation(written.form, ((nominal[0], None, None),))
    return Relation(written.form, tuple(targets))


def _target(
    item: t.Toleranced, dimension: Dimension, scale: str, words: str, frame: Frame
) -> tuple[Expression, Expression, Expression]:
    """Nominal, lowest and highest value of what is asked for."""
    value, tolerance = toleranced(item, frame.scope, frame.draft)
    refuse_nets(value, item.value, frame.scope, "a requirement")
    if value.dimension != dimension or value.scale != scale:
        wanted = scale or (name_of(dimension) or "a pure number")
        raise frame.scope.mistake(
            "dimension",
            f"`{words}` is measured in {wanted}, not in {unit_in_words(value)}",
            item.value.place,
        )
    if words in COUNTS:
        _check_count(value, item.value, frame)
    low, high = limits(value.tree, tolerance) if tolerance is not None else (value.tree, value.tree)
    return value.tree, low, high


def _check_count(value: Typed, formula: t.Formula, frame: Frame) -> None:
    number = frame.draft.number(value.tree, formula, frame.scope)
    if number < 0.0 or number != int(number):
        raise frame.scope.mistake("relation", f"a count is a whole number, not {number:g}", formula.place)


def _bindings(statement: t.Expect, frame: Frame) -> tuple[tuple[str, tuple[Expression, ...]], ...]:
    """What stands after `at`: each let with its values; a bare value belongs to the let before it."""
    scope = frame.scope
    found: dict[str, list[Expression]] = {}
    current: t.Word | None = None
    for first, values in statement.at:
        if values is not None and isinstance(first, t.Word):
            current = first
            _let_of(first, frame)
            if first.text in found:
                raise scope.mistake("binding", f"`{first.text}` is bound twice", first.place)
            found[first.text] = []
        elif values is not None or current is None:
            raise scope.mistake("binding", "after `at` stands LET = value", first.place)
        for formula in (first,) if values is None else values:
            found[current.text].append(_bound(current, formula, frame))
    return tuple((name, tuple(values)) for name, values in found.items())


def _bound(name: t.Word, formula: t.Formula, frame: Frame) -> Expression:
    let, value = _let_of(name, frame), constant(formula, frame.scope, "a binding")
    if value.dimension != let.dimension or value.scale != let.scale:
        raise frame.scope.mistake(
            "dimension", f"`{name.text}` is in {unit_in_words(let)}, not {unit_in_words(value)}", formula.place
        )
    return value.tree


def _label(words: str, statement: t.Expect, frame: Frame) -> str:
    """The label as written, or one made of the measure; no two are alike."""
    taken = {requirement.label for requirement in frame.draft.requirements}
    if statement.label is not None:
        label = statement.label.text
        if label in taken:
            raise frame.scope.mistake(
                "duplicate-label", f"the label `{label}` stands twice", statement.label.place
            )
        return label
    return _free(_made_label(words, statement), taken)


def _made_label(words: str, statement: t.Expect) -> str:
    parts = [words]
    if isinstance(statement.target, t.Word):
        parts.append(statement.target.text)
    if statement.along is not None:
        parts.append(f"along {statement.along.text}")
    return re.sub(r"[^A-Za-z0-9]+", "_", " ".join(parts)).strip("_")


def _free(label: str, taken: set[str]) -> str:
    if label not in taken:
        return label
    k = 2
    while f"{label}_{k}" in taken:
        k += 1
    return f"{label}_{k}"


def _written(source: Source, formula: t.Formula) -> str:
    """A formula as it stands in the text."""
    where = formula.place
    if where.line != where.end_line:
        return "formula"
    return source.lines[where.line - 1][where.column - 1 : where.end_column - 1]


def _text(source: Source, line: int) -> str:
    """The requirement as written, on one line whatever it was laid out on."""
    text = _without_comment(source.lines[line - 1]).strip()
    for more in source.lines[line:]:
        if text.count("(") <= text.count(")") and not text.endswith(","):
            break
        text = f"{text} {_without_comment(more).strip()}".strip()
    return text


def _without_comment(line: str) -> str:
    quoted = False
    for i, c in enumerate(line):
        if c == '"':
            quoted = not quoted
        elif c == "#" and not quoted:
            return line[:i]
    return line
