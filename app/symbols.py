"""What the quantities are called in each frame: words, symbols, units, and the Hamiltonian in MathML."""

from collections.abc import Mapping
from dataclasses import dataclass
from html import escape

from app.keys import number_text
from app.sheets import Sheet


@dataclass(frozen=True)
class Symbol:
    """One quantity as it is written: in words, as plain text, for a figure, and in MathML.

    `frequency` says whether the value carries the unit of the sheet.
    """

    words: str
    plain: str
    figure: str
    mathml: str
    frequency: bool = True


def _identifier(letter: str, below: str = "") -> str:
    base = f"<mi>{letter}</mi>"
    return f"<msub>{base}<mn>{below}</mn></msub>" if below.isdigit() else _word_below(base, below)


def _word_below(base: str, below: str) -> str:
    return f"<msub>{base}<mi>{below}</mi></msub>" if below else base


_OMEGA = _identifier("ω")
_OMEGA_0 = _identifier("ω", "0")
_LAMBDA = _identifier("λ")
_LAMBDA_C = _identifier("λ", "c")
_G_0 = _identifier("g", "0")
_N = "<mi>N</mi>"
_EPSILON = "<mi>ε</mi>"
_MINUS_DELTA = "<mo>−</mo><mi>δ</mi>"
_RATIO = f"<mrow><msup>{_LAMBDA}<mo>′</mo></msup><mo>/</mo>{_LAMBDA}</mrow>"

_SHARED = {
    "spins": Symbol("number of spins", "N", "N", _N, frequency=False),
    "ratio": Symbol("counter-rotating over rotating", "λ′/λ", "λ′/λ", _RATIO, frequency=False),
    "bias": Symbol("bias", "ε", "ε", _EPSILON),
}

_FRAMES: dict[str, dict[str, Symbol]] = {
    "cavity": _SHARED
    | {
        "mode": Symbol("mode frequency", "ω", "ω", _OMEGA),
        "splitting": Symbol("spin frequency", "ω₀", "ω<sub>0</sub>", _OMEGA_0),
        "detuning": Symbol(
            "detuning", "ω₀ − ω", "ω<sub>0</sub> − ω", f"<mrow>{_OMEGA_0}<mo>−</mo>{_OMEGA}</mrow>"
        ),
        "coupling": Symbol("collective coupling", "λ", "λ", _LAMBDA),
        "coupling-over-critical": Symbol(
            "coupling over critical",
            "λ/λc",
            "λ/λ<sub>c</sub>",
            f"<mrow>{_LAMBDA}<mo>/</mo>{_LAMBDA_C}</mrow>",
            frequency=False,
        ),
        "critical": Symbol("critical coupling", "λc", "λ<sub>c</sub>", _LAMBDA_C),
    },
    "trap": _SHARED
    | {
        "mode": Symbol("detuning of the force", "−δ", "−δ", f"<mrow>{_MINUS_DELTA}</mrow>"),
        "splitting": Symbol("transverse field", "B", "B", "<mi>B</mi>"),
        "detuning": Symbol(
            "field minus |δ|", "B + δ", "B + δ", "<mrow><mi>B</mi><mo>+</mo><mi>δ</mi></mrow>"
        ),
        "coupling": Symbol(
            "half of the force strength",
            "g₀/2",
            "g<sub>0</sub>/2",
            f"<mrow>{_G_0}<mo>/</mo><mn>2</mn></mrow>",
        ),
        "coupling-over-critical": Symbol(
            "force over critical",
            "g₀/gc",
            "g<sub>0</sub>/g<sub>c</sub>",
            f"<mrow>{_G_0}<mo>/</mo>{_identifier('g', 'c')}</mrow>",
            frequency=False,
        ),
        "critical": Symbol(
            "half of the critical force strength",
            "gc/2",
            "g<sub>c</sub>/2",
            f"<mrow>{_identifier('g', 'c')}<mo>/</mo><mn>2</mn></mrow>",
        ),
    },
}


def symbol(name: str, frame: str) -> Symbol:
    """Return how the quantity `name` (a swept key, or "critical") is written in a frame."""
    return _FRAMES[frame][name]


def measures_in_mode(sheet: Sheet) -> bool:
    """Say whether numbers are multiples of the mode frequency: no unit, and the mode held at 1."""
    return sheet.unit == "none" and sheet.mode == 1.0 and "mode" not in sheet.swept


def with_unit(figure_symbol: str, sheet: Sheet) -> str:
    """Return a frequency's symbol with its unit: "E/ω", "E/2π (kHz)", or the bare symbol."""
    wrapped = f"({figure_symbol})" if " " in figure_symbol or "/" in figure_symbol else figure_symbol
    if sheet.unit != "none":
        return f"{wrapped}/2π ({sheet.unit})"
    if not measures_in_mode(sheet):
        return figure_symbol
    return f"{wrapped}/ω" if sheet.frame == "cavity" else f"{wrapped}/|δ|"


def energy_unit(sheet: Sheet) -> str:
    """Return what stands behind an energy value: "× 2π kHz", "ω", or nothing."""
    if sheet.unit != "none":
        return f"× 2π {sheet.unit}"
    if not measures_in_mode(sheet):
        return ""
    return "ω" if sheet.frame == "cavity" else "|δ|"


def axis_title(sheet: Sheet) -> str:
    """Return the title of the swept axis for a figure."""
    swept = symbol(sheet.along, sheet.frame)
    shown = with_unit(swept.figure, sheet) if swept.frequency else swept.figure
    return f"{swept.words}  {shown}"


def member_name(sheet: Sheet) -> str:
    """Return the name of the family's member, such as "Dicke model" or "Rabi model with bias"."""
    single = sheet.spins == 1 and "spins" not in sheet.swept
    if "ratio" in sheet.swept or sheet.ratio not in {0.0, 1.0}:
        name = "Anisotropic Rabi" if single else "Anisotropic Dicke"
    elif sheet.ratio == 0.0:
        name = "Jaynes–Cummings" if single else "Tavis–Cummings"
    else:
        name = "Rabi" if single else "Dicke"
    return f"{name} model with bias" if _biased(sheet) else f"{name} model"


def sheet_title(sheet: Sheet) -> str:
    """Return the title of a sheet: its own, or one that says what is swept."""
    if sheet.title:
        return sheet.title
    swept = symbol(sheet.along, sheet.frame).plain
    start, stop = _signed(sheet.start), _signed(sheet.stop)
    spins = "" if "spins" in sheet.swept else f", N = {sheet.spins}"
    return f"{member_name(sheet)}{spins}: {swept} from {start} to {stop}"


def place_title(sheet: Sheet, places: Mapping[str, float]) -> str:
    """Return the title of one point of a sheet."""
    known = {} if "spins" in sheet.swept else {"spins": sheet.spins}
    parts = [
        f"{symbol(name, sheet.frame).plain} = {_signed(int(value) if name == 'spins' else value)}"
        for name, value in {**known, **places}.items()
    ]
    return f"{sheet.title or member_name(sheet)}: {', '.join(parts)}"


def curve_label(name: str, value: float, frame: str) -> str:
    """Return the label of one curve of a family, for a figure."""
    return f"{symbol(name, frame).figure} = {_signed(int(value) if name == 'spins' else value)}"


# -- Hamiltonian -----------------------------------------------------------------------------------

_A = "<mi>a</mi>"
_A_DAGGER = "<msup><mi>a</mi><mo>†</mo></msup>"
_NUMBER = f"<mrow>{_A_DAGGER}{_A}</mrow>"
_SUM = f"<mrow><mo>(</mo>{_A}<mo>+</mo>{_A_DAGGER}<mo>)</mo></mrow>"
_DIFFERENCE = f"<mrow><mo>(</mo>{_A}<mo>−</mo>{_A_DAGGER}<mo>)</mo></mrow>"
_ROOT = f"<msqrt>{_N}</msqrt>"
_LAMBDA_PRIME = f"<msup>{_LAMBDA}<mo>′</mo></msup>"


def _spin(letter: str, component: str) -> str:
    inner = f"<mo>{component}</mo>" if component in "+−" else f"<mi>{component}</mi>"
    return f"<msub><mi>{letter}</mi>{inner}</msub>"


def _over(top: str, bottom: str) -> str:
    return f"<mfrac>{top}{bottom}</mfrac>"


def hamiltonian(sheet: Sheet) -> str:
    """Return the Hamiltonian of a sheet as one MathML element, in the symbols of its frame."""
    body = _trap_terms(sheet) if sheet.frame == "trap" else _cavity_terms(sheet)
    return (
        '<math xmlns="http://www.w3.org/1998/Math/MathML" display="block">'
        f"<mrow><mi>H</mi><mo>=</mo>{body}</mrow></math>"
    )


def _shape(sheet: Sheet) -> str:
    """Say which form the coupling takes: isotropic, rotating (no counter-rotating part), or general."""
    if "ratio" in sheet.swept or sheet.ratio not in {0.0, 1.0}:
        return "general"
    return "isotropic" if sheet.ratio == 1.0 else "rotating"


def _biased(sheet: Sheet) -> bool:
    return "bias" in sheet.swept or sheet.bias != 0.0


def _cavity_terms(sheet: Sheet) -> str:
    single = sheet.spins == 1 and "spins" not in sheet.swept
    terms = f"{_OMEGA}{_NUMBER}<mo>+</mo>"
    if single:
        terms += f"{_over(_OMEGA_0, '<mn>2</mn>')}{_spin('σ', 'z')}<mo>+</mo>"
    else:
        terms += f"{_OMEGA_0}{_spin('J', 'z')}<mo>+</mo>"
    terms += _cavity_coupling(_shape(sheet), single=single)
    if _biased(sheet):
        terms += "<mo>+</mo>"
        terms += (
            f"{_over(_EPSILON, '<mn>2</mn>')}{_spin('σ', 'x')}" if single else f"{_EPSILON}{_spin('J', 'x')}"
        )
    return terms


def _cavity_coupling(shape: str, *, single: bool) -> str:
    letter = "σ" if single else "J"
    if shape == "isotropic":
        if single:
            return f"{_LAMBDA}{_SUM}{_spin('σ', 'x')}"
        return f"{_over(f'<mrow><mn>2</mn>{_LAMBDA}</mrow>', _ROOT)}{_SUM}{_spin('J', 'x')}"
    rotating = (
        f"<mrow><mo>(</mo>{_A}{_spin(letter, '+')}<mo>+</mo>{_A_DAGGER}{_spin(letter, '−')}<mo>)</mo></mrow>"
    )
    if shape == "rotating":
        return f"{_LAMBDA if single else _over(_LAMBDA, _ROOT)}{rotating}"
    counter = (
        f"<mrow><mo>(</mo>{_A_DAGGER}{_spin(letter, '+')}<mo>+</mo>{_A}{_spin(letter, '−')}<mo>)</mo></mrow>"
    )
    first, second = (
        (_LAMBDA, _LAMBDA_PRIME) if single else (_over(_LAMBDA, _ROOT), _over(_LAMBDA_PRIME, _ROOT))
    )
    return f"{first}{rotating}<mo>+</mo>{second}{counter}"


def _trap_terms(sheet: Sheet) -> str:
    """Spin axes turned so that the field lies along x and the force along z: Jz -> Sx, Jx -> -Sz."""
    terms = f"{_MINUS_DELTA}{_NUMBER}<mo>+</mo><mi>B</mi>{_spin('S', 'x')}<mo>−</mo>"
    if _shape(sheet) == "isotropic":
        terms += f"{_over(_G_0, _ROOT)}{_SUM}{_spin('S', 'z')}"
    else:
        half = f"<mrow><mn>2</mn>{_ROOT}</mrow>"
        ratio = "<mi>r</mi>"
        terms += (
            f"{_over(_G_0, half)}<mrow><mo>[</mo>"
            f"<mrow><mo>(</mo><mn>1</mn><mo>+</mo>{ratio}<mo>)</mo></mrow>{_SUM}{_spin('S', 'z')}"
            f"<mo>−</mo><mi>i</mi><mrow><mo>(</mo><mn>1</mn><mo>−</mo>{ratio}<mo>)</mo></mrow>"
            f"{_DIFFERENCE}{_spin('S', 'y')}"
            "<mo>]</mo></mrow>"
        )
    return terms + (f"<mo>−</mo>{_EPSILON}{_spin('S', 'z')}" if _biased(sheet) else "")


def values_in_force(sheet: Sheet, places: Mapping[str, float] | None = None) -> list[str]:
    """Return the values behind the symbols as MathML elements: fixed ones, the sweep, the family.

    With `places`, what is swept or varied stands at the one value given there.
    """
    unit = "" if sheet.unit == "none" else f"<mspace width='.25em'/><mtext>{escape(sheet.unit)}</mtext>"
    shown = []
    fixed: dict[str, float] = {
        "spins": sheet.spins,
        "mode": sheet.mode,
        "splitting": sheet.working_splitting,
        "coupling": sheet.coupling,
    }
    if _shape(sheet) == "general":
        fixed["ratio"] = sheet.ratio
    if _biased(sheet):
        fixed["bias"] = sheet.bias
    for name, value in fixed.items():
        if not _overridden(name, sheet):
            shown.append(_equation(name, f"<mn>{_signed(value)}</mn>", sheet, unit))
    if places is not None:
        return shown + [
            _equation(name, f"<mn>{_signed(value)}</mn>", sheet, unit) for name, value in places.items()
        ]
    shown.append(interval_in_force(sheet.along, sheet.start, sheet.stop, sheet))
    if sheet.each is not None:
        numbers = "<mo>,</mo>".join(f"<mn>{_signed(value)}</mn>" for value in sheet.each.values)
        shown.append(_equation(sheet.each.name, numbers, sheet, unit))
    return shown


def interval_in_force(name: str, low: float, high: float, sheet: Sheet) -> str:
    """Return a swept quantity and its range as a MathML element."""
    unit = "" if sheet.unit == "none" else f"<mspace width='.25em'/><mtext>{escape(sheet.unit)}</mtext>"
    interval = f"<mn>{_signed(low)}</mn><mo>…</mo><mn>{_signed(high)}</mn>"
    return _equation(name, interval, sheet, unit)


def _overridden(name: str, sheet: Sheet) -> bool:
    same = {"splitting": {"splitting", "detuning"}, "coupling": {"coupling", "coupling-over-critical"}}
    return bool(same.get(name, {name}) & sheet.swept)


def _equation(name: str, right: str, sheet: Sheet, unit: str) -> str:
    written = symbol(name, sheet.frame)
    left = "<mi>r</mi><mo>=</mo>" if name == "ratio" and sheet.frame == "trap" else ""
    scaled = written.frequency and sheet.unit != "none"
    compound = any(mark in written.plain for mark in " /")
    shown = f"<mrow><mo>(</mo>{written.mathml}<mo>)</mo></mrow>" if compound and scaled else written.mathml
    left += f"{shown}<mo>/</mo><mn>2</mn><mi>π</mi>" if scaled else shown
    return (
        f'<math xmlns="http://www.w3.org/1998/Math/MathML"><mrow>{left}<mo>=</mo>{right}'
        f"{unit if scaled else ''}</mrow></math>"
    )


def _signed(value: float) -> str:
    return number_text(value).replace("-", "−")
