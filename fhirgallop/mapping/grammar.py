"""The format of template maps, as data: which keys there are, what they hold, and what they mean.

One description serves the reader (`structure`), and the published JSON Schema (`schema`).
"""

from __future__ import annotations

from dataclasses import dataclass
from typing import Final

FORMAT_VERSION: Final = "1"


@dataclass(frozen=True, slots=True)
class Word:
    """A single text; `words` lists the only ones allowed, `pattern` its form."""

    about: str = ""
    words: tuple[str, ...] = ()
    pattern: str = ""


@dataclass(frozen=True, slots=True)
class ListOf:
    """A list of at least one."""

    each: Shape
    about: str = ""
    exactly: int = 0


@dataclass(frozen=True, slots=True)
class TableOf:
    """Keys that the writer of the map chooses, each with one of these."""

    each: Shape
    about: str = ""


@dataclass(frozen=True, slots=True)
class Key:
    """One key of a group."""

    name: str
    shape: Shape
    required: bool = False


@dataclass(frozen=True, slots=True)
class Group:
    """Keys with fixed names; where `one_of` is given, at least one of these must be there."""

    name: str
    about: str
    keys: tuple[Key, ...]
    one_of: tuple[str, ...] = ()

    def key(self, name: str) -> Key | None:
        """The key of that name."""
        return next((key for key in self.keys if key.name == name), None)


@dataclass(frozen=True, slots=True)
class Ref:
    """A group named in GROUPS (conditions hold conditions)."""

    name: str


@dataclass(frozen=True, slots=True)
class Either:
    """A single text, or the longer form."""

    short: Word
    long: Shape


Shape = Word | ListOf | TableOf | Group | Ref | Either

_FIELD = Word("Name of a field: dotted path (JSON), column header, OBX-3.1 identifier, or linkId.")
_FIELDS = ListOf(_FIELD, "Names of fields whose texts are put together.")
_SYSTEM = Word(
    "Address that makes the number unique, such as https://clinic.example/patients.", pattern="^\\S+:\\S+$"
)
_YES = Word("true, or left out.", words=("true", "false"))
_BLANK = Word("What a blank box means.", words=("not-recorded", "absent", "not-examined"))
_WHOLE = "^[1-9][0-9]{0,2}$"

_MEANING = Group(
    "meaning",
    "What a wording means, when one word cannot say it.",
    (
        Key("presence", Word("present, absent, uncertain, not-examined, not-examinable or not-recorded.")),
        Key("answer", Word("Value of the finding's own list of answers.")),
        Key(
            "qualifiers",
            TableOf(Word("Value of the qualifier."), "Qualifiers that the wording says besides."),
        ),
        Key("reason", Word("Why it was not, or could not be, examined.")),
    ),
    one_of=("presence", "answer"),
)
_CHOICE = TableOf(
    Either(Word("Presence, answer, or not-recorded."), _MEANING),
    "Every wording the box may hold, with what it means.",
)
_CHOICES = Group(
    "choices",
    "A box that may hold several wordings at once.",
    (
        Key("separator", Word("Sign between them; left out where each comes as a value of its own.")),
        Key("values", _CHOICE, required=True),
    ),
)
_NUMBER = Group(
    "number",
    "A number, perhaps with its unit.",
    (
        Key(
            "unit",
            Word("UCUM code used where the value brings no unit; in-value where it always must."),
            required=True,
        ),
        Key("split", Word("Sign between several numbers in one box, such as / in 152/84.")),
        Key("part", Word("Which of these numbers, from 1.", pattern=_WHOLE)),
        Key("decimal", Word("Decimal sign of numbers sent as text.", words=(".", ","))),
    ),
)
_GRADE = Group(
    "grade",
    "A grade as text: III/VI, 3/6, 2-3/6, II-III/VI, or 3.",
    (Key("of", Word("Highest grade of the scale: 6, or 4.", words=("4", "6")), required=True),),
)
_QUALIFIER = Group(
    "qualifier",
    "Where a qualifier comes from: a constant, or a field with one way to read it.",
    (
        Key("constant", Word("The same value for all records.")),
        Key("field", _FIELD),
        Key("choice", _CHOICE),
        Key("choices", _CHOICES),
        Key("grade", _GRADE),
        Key("text", _YES),
    ),
    one_of=("constant", "field"),
)
_CONDITION = Group(
    "condition",
    "When the line is read.",
    (
        Key("field", _FIELD),
        Key("is", ListOf(Word("Wording.")), required=False),
        Key("blank", Word("true or false.", words=("true", "false"))),
        Key("all", ListOf(Ref("condition"))),
        Key("any", ListOf(Ref("condition"))),
        Key("not", Ref("condition")),
    ),
    one_of=("field", "all", "any", "not"),
)
_NAMED = Group(
    "findings",
    "One box that names several findings.",
    (
        Key("separator", Word("Sign between the names; left out where each comes as a value of its own.")),
        Key(
            "values",
            TableOf(
                Either(
                    Word("Finding id, or not-recorded for a wording such as 'none'."),
                    Group(
                        "named",
                        "A finding with what the wording says of it.",
                        (
                            Key("finding", Word("Finding id."), required=True),
                            Key("presence", Word("Presence; present where left out.")),
                            Key("qualifiers", TableOf(Word("Value of the qualifier."))),
                        ),
                    ),
                ),
                "Every wording, with the finding it names.",
            ),
            required=True,
        ),
        Key(
            "unlisted",
            Word(
                "What a filled box says of the findings it does not name.",
                words=("not-recorded", "absent", "not-examined"),
            ),
        ),
    ),
)
_WORDS = Group(
    "words",
    "A box that holds a line of text, such as 'RRR, no m/r/g': its findings are read from the words.",
    (
        Key("language", Word("Language of the wordings, such as en.", pattern="^[a-z]{2}$"), required=True),
        Key(
            "status",
            Word(
                "How far a finding that was read has got; as the examination's where left out.",
                words=("preliminary",),
            ),
        ),
    ),
)
_ZONE = Key("zone", Word("Z, an offset such as +01:00, or a name such as Europe/Vienna."))
_FORMAT = Key("format", Word("Written form such as DD.MM.YYYY hh:mm; ISO 8601 where left out."))
_LINE_TIME = Group(
    "time",
    "When that was which the box says, where it has a time of its own; blank, it is the examination's.",
    (Key("field", _FIELD), Key("fields", _FIELDS), _ZONE, _FORMAT),
    one_of=("field", "fields"),
)
LINE: Final = Group(
    "line",
    "What one box, or one constant, says of one finding; or a box that names several; or a line of "
    "text; or a remark.",
    (
        Key("finding", Word("Finding id of the catalogue, such as heart-sound.s4.")),
        Key(
            "instance",
            Word(
                "Tells two entries of one finding apart, such as 1 and 2.", pattern="^[A-Za-z0-9._-]{1,32}$"
            ),
        ),
        Key("section", Word("Name of a section below `sections`.")),
        Key("when", Ref("condition")),
        Key("field", _FIELD),
        Key(
            "presence",
            Word("Constant presence, for a finding without a box; a box is read by field and choice."),
        ),
        Key("choice", _CHOICE),
        Key("choices", _CHOICES),
        Key("number", _NUMBER),
        Key("text", _YES),
        Key("findings", _NAMED),
        Key("words", _WORDS),
        Key("qualifiers", TableOf(_QUALIFIER, "Qualifiers by axis.")),
        Key("note", Word("Field whose words travel with the finding; alone, with the whole examination.")),
        Key("time", _LINE_TIME),
        Key("blank-means", _BLANK),
    ),
    one_of=("finding", "findings", "words", "note"),
)

_PARTY = Group(
    "party",
    "Who or what: a business number and its system, or a FHIR id.",
    (Key("field", _FIELD), Key("system", _SYSTEM), Key("fhir-id", _YES)),
    one_of=("system", "fhir-id"),
)
_IDENTIFIER = Group(
    "identifier",
    "The examination's own number.",
    (Key("field", _FIELD), Key("fields", _FIELDS), Key("system", _SYSTEM, required=True)),
)
_MONTHS = ListOf(Word("Day, month or year, such as 2014-07."), exactly=2)
_TIME = Group(
    "time",
    "When the examination took place.",
    (
        Key("field", _FIELD),
        Key("fields", _FIELDS),
        _ZONE,
        _FORMAT,
        Key(
            "periods",
            TableOf(_MONTHS, "Wordings that stand for a span of time: first and last day or month."),
        ),
        Key("constant", Word("The same time for all records.")),
    ),
)
_STATUS = Group(
    "status",
    "How far the examination has got.",
    (
        Key("field", _FIELD, required=True),
        Key(
            "choice",
            TableOf(Word(words=("final", "preliminary", "amended", "corrected", "entered-in-error"))),
            required=True,
        ),
    ),
)
_RECORD = Group(
    "record",
    "Whose examination it is, which one, and when. A field that the record lacks is looked up in the form's "
    "own header (HL7 v2, QuestionnaireResponse).",
    (
        Key("patient", _PARTY, required=True),
        Key("identifier", _IDENTIFIER, required=True),
        Key("time", _TIME, required=True),
        Key("encounter", _PARTY),
        Key("examiner", _PARTY),
        Key("status", _STATUS),
    ),
)
_IGNORE = Group(
    "ignore",
    "A field, or all fields of a pattern with *, that are left out on purpose.",
    (
        Key("field", _FIELD),
        Key("fields", Word("Pattern; * stands for any letters.")),
        Key("reason", Word("Why, for whoever reads the map next."), required=True),
    ),
    one_of=("field", "fields"),
)
_SECTION = Group(
    "section", "What lines of one section share.", (Key("blank-means", _BLANK), Key("when", Ref("condition")))
)
MAP: Final = Group(
    "map",
    "A fhirgallop template map: from the fields of one form to findings.",
    (
        Key("template-map", Word("Version of this format.", words=(FORMAT_VERSION,)), required=True),
        Key(
            "name",
            Word("Short name, without blanks.", pattern="^[A-Za-z0-9][A-Za-z0-9._-]{0,63}$"),
            required=True,
        ),
        Key(
            "version",
            Word("Version of this map; raise it with every change.", pattern="^\\S{1,32}$"),
            required=True,
        ),
        Key("title", Word("Name of the form, for people.")),
        Key("record", _RECORD, required=True),
        Key("blanks", ListOf(Word("Wording."), "Wordings that count as an empty box.")),
        Key("blank-means", _BLANK),
        Key(
            "unknown-values",
            Word("What happens to a wording that no line knows.", words=("refuse", "keep-as-text")),
        ),
        Key(
            "local-system",
            Word(
                "Address of the form's own code system, to keep local names as codings.",
                pattern="^\\S+:\\S+$",
            ),
        ),
        Key("sections", TableOf(_SECTION, "Sections of the form, by name.")),
        Key(
            "lines",
            ListOf(LINE, "The rules, in the order in which the findings shall come out."),
            required=True,
        ),
        Key("ignore", ListOf(_IGNORE)),
    ),
)

GROUPS: Final = {"condition": _CONDITION}


def resolved(shape: Shape) -> Shape:
    """The group a reference stands for; any other shape is itself."""
    return GROUPS[shape.name] if isinstance(shape, Ref) else shape
