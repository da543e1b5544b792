"""What LaTeX writes for letters and signs beyond ASCII."""

from __future__ import annotations

__all__ = ["ACCENTS", "BELOW", "HATS", "LETTERS", "MATH", "PLAIN", "RAISED", "TEXT"]

_GREEK = {
    "α": "alpha", "β": "beta", "γ": "gamma", "δ": "delta", "ε": "varepsilon", "ζ": "zeta", "η": "eta",
    "θ": "theta", "ι": "iota", "κ": "kappa", "λ": "lambda", "μ": "mu", "ν": "nu", "ξ": "xi", "π": "pi",
    "ρ": "rho", "ς": "varsigma", "σ": "sigma", "τ": "tau", "υ": "upsilon", "φ": "varphi", "χ": "chi",
    "ψ": "psi", "ω": "omega", "ϕ": "phi", "ϵ": "epsilon", "ϑ": "vartheta", "ϱ": "varrho", "µ": "mu",
    "Γ": "Gamma", "Δ": "Delta", "Θ": "Theta", "Λ": "Lambda", "Ξ": "Xi", "Π": "Pi", "Σ": "Sigma",
    "Υ": "Upsilon", "Φ": "Phi", "Ψ": "Psi", "Ω": "Omega",
}  # fmt: skip
_GREEK_AS_LATIN = dict(zip("ΑΒΕΖΗΙΚΜΝΟΡΤΧο", "ABEZHIKMNOPTXo", strict=True))

MATH = {
    **{letter: f"\\{name}" for letter, name in _GREEK.items()},
    **{letter: f"\\mathrm{{{latin}}}" for letter, latin in _GREEK_AS_LATIN.items()},
    "±": r"\pm", "∓": r"\mp", "×": r"\times", "÷": r"\div", "·": r"\cdot", "⋅": r"\cdot", "−": "-", "¬": r"\neg",
    "≤": r"\le", "≥": r"\ge", "⩽": r"\le", "⩾": r"\ge", "≠": r"\ne", "≈": r"\approx", "≡": r"\equiv",
    "∼": r"\sim", "≃": r"\simeq", "≅": r"\cong", "∝": r"\propto", "≪": r"\ll", "≫": r"\gg", "∞": r"\infty",
    "∑": r"\sum", "∏": r"\prod", "∫": r"\int", "√": r"\surd", "∂": r"\partial", "∇": r"\nabla", "ℓ": r"\ell",
    "∈": r"\in", "∉": r"\notin", "∋": r"\ni", "∅": r"\emptyset", "⊂": r"\subset", "⊆": r"\subseteq",
    "⊃": r"\supset", "⊇": r"\supseteq", "∩": r"\cap", "∪": r"\cup", "⊕": r"\oplus", "⊗": r"\otimes",
    "⊥": r"\perp", "∥": r"\parallel", "∣": r"\mid", "∀": r"\forall", "∃": r"\exists", "∧": r"\wedge",
    "∨": r"\vee", "←": r"\leftarrow", "→": r"\rightarrow", "↔": r"\leftrightarrow", "↑": r"\uparrow",
    "↓": r"\downarrow", "⇒": r"\Rightarrow", "⇐": r"\Leftarrow", "⇔": r"\Leftrightarrow", "↦": r"\mapsto",
    "⟨": r"\langle", "⟩": r"\rangle", "⌊": r"\lfloor", "⌋": r"\rfloor", "⌈": r"\lceil", "⌉": r"\rceil",
    "′": r"{}^{\prime}", "″": r"{}^{\prime\prime}", "⁄": "/", "∘": r"\circ", "∗": r"\ast", "⋆": r"\star",
    "…": r"\ldots", "⋯": r"\cdots", "✓": r"\surd", "✔": r"\surd", "✗": r"\times", "✘": r"\times",
    "▲": r"\bigtriangleup", "▼": r"\bigtriangledown", "△": r"\bigtriangleup", "▽": r"\bigtriangledown",
}  # fmt: skip
"""Letters and signs that are set in mathematics."""

TEXT = {
    "\\": r"\textbackslash{}", "{": r"\{", "}": r"\}", "$": r"\$", "&": r"\&", "%": r"\%", "#": r"\#",
    "_": r"\_\allowbreak{}", "^": r"\textasciicircum{}", "~": r"\textasciitilde{}", "`": r"\textasciigrave{}",
    '"': r"\textquotedbl{}", "<": r"\textless{}", ">": r"\textgreater{}", "|": r"\textbar{}",
    "[": "{[}", "]": "{]}", "*": "{*}",
    "\u00a0": "~", "\u202f": r"\,", "\u2009": r"\,", "\u200a": r"\,", "\u2002": r"\enspace{}",
    "\u2003": r"\quad{}", "\u00ad": r"\-", "\u2010": "-", "\u2011": "-", "–": r"\textendash{}",
    "—": r"\textemdash{}", "‘": r"\textquoteleft{}", "’": r"\textquoteright{}", "“": r"\textquotedblleft{}",
    "”": r"\textquotedblright{}", "‚": r"\quotesinglbase{}", "„": r"\quotedblbase{}", "‹": r"\guilsinglleft{}",
    "›": r"\guilsinglright{}", "«": r"\guillemotleft{}", "»": r"\guillemotright{}", "•": r"\textbullet{}",
    "†": r"\textdagger{}", "‡": r"\textdaggerdbl{}", "§": r"\textsection{}", "¶": r"\textparagraph{}",
    "©": r"\textcopyright{}", "®": r"\textregistered{}", "™": r"\texttrademark{}", "°": r"\textdegree{}",
    "£": r"\textsterling{}", "€": r"\texteuro{}", "¥": r"\textyen{}", "¢": r"\textcent{}", "¤": r"\textcurrency{}",
    "¦": r"\textbrokenbar{}", "ª": r"\textordfeminine{}", "º": r"\textordmasculine{}", "½": r"\textonehalf{}",
    "¼": r"\textonequarter{}", "¾": r"\textthreequarters{}", "‰": r"\textperthousand{}",
    "№": r"\textnumero{}", "¡": r"\textexclamdown{}", "¿": r"\textquestiondown{}", "␣": r"\textvisiblespace{}",
}  # fmt: skip
"""Signs that are set in text, those that mean something to LaTeX among them."""

LETTERS = {
    "ß": r"\ss{}", "ẞ": r"\SS{}", "æ": r"\ae{}", "Æ": r"\AE{}", "œ": r"\oe{}", "Œ": r"\OE{}", "ø": r"\o{}",
    "Ø": r"\O{}", "ł": r"\l{}", "Ł": r"\L{}", "đ": r"\dj{}", "Đ": r"\DJ{}", "ð": r"\dh{}", "Ð": r"\DH{}",
    "þ": r"\th{}", "Þ": r"\TH{}", "ı": r"\i{}", "ȷ": r"\j{}", "ŋ": r"\ng{}", "Ŋ": r"\NG{}", "ĳ": r"\ij{}",
    "Ĳ": r"\IJ{}",
}  # fmt: skip
"""Latin letters that are no letter with an accent."""

ACCENTS = {
    "\u0300": "`", "\u0301": "'", "\u0302": "^", "\u0303": "~", "\u0304": "=", "\u0306": "u", "\u0307": ".",
    "\u0308": '"', "\u030a": "r", "\u030b": "H", "\u030c": "v", "\u0323": "d", "\u0327": "c", "\u0328": "k",
    "\u0331": "b",
}  # fmt: skip
"""Accents on Latin letters in text."""

HATS = {
    "\u0302": "hat",
    "\u0304": "bar",
    "\u0305": "overline",
    "\u0303": "tilde",
    "\u0307": "dot",
    "\u0308": "ddot",
}
"""Marks on letters in mathematics, where no letter of an alphabet has them."""

RAISED = dict(zip("⁰¹²³⁴⁵⁶⁷⁸⁹⁺⁻⁼⁽⁾ⁿⁱᵀ", "0123456789+-=()niT", strict=True))
BELOW = dict(zip("₀₁₂₃₄₅₆₇₈₉₊₋₌₍₎ₐₑᵢⱼₖₗₘₙₒₚᵣₛₜᵤᵥₓ", "0123456789+-=()aeijklmnoprstuvx", strict=True))

PLAIN = frozenset("ABCDEFGHIJKLMNOPQRSTUVWXYZabcdefghijklmnopqrstuvwxyz0123456789 .:;!?()/@+='-,")
"""Characters that stand for themselves."""
