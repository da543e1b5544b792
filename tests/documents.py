"""Documents for the tests of renderers: every kind of block, and names as bad as users can make them."""

from mixbridge.report.document import Bullets, Code, Document, Formula, Heading, Paragraph, Picture, Table

HOSTILE = (
    "\\input{/etc/passwd} \\end{document} $x^2$ %c #1 & ~ ^ _ { } \\\\[3em] *",
    '<script>window.pwned = 1</script><img src=x onerror="window.pwned = 1"> &lt; &amp; &copy </td></title>',
    "| a | `b` **c** [d](javascript:alert(1)) ![e](http://x.invalid/z) _f_ ~~g~~\n- i\n1. j\n# k",
    "x" * 200,
    "a_b" * 67,
    "שלום עולם 3.4 " * 8,
    "abc\u202egnp.exe\u202c \u2066x\u2069 \u200f",
    '=HYPERLINK("http://x.invalid")',
    "@SUM(1)",
    "+1+2",
    "-2+3",
    "＝1",
    "\t=1",
    'quote " comma , line\nbreak',
    "naïve Łódź Ångström œuvre ế ạ̄ ż ǧ đ ß ¿¡ “q” ‘q’ — – … € £ № ½",
    "β̂_1 x̄ ỹ σ̂_α² ŷ Ω Ξ ≤ ≥ ≠ ≈ ± × · ∑ √ ∞ → ₀ x₁₂ 10⁻³ T_i K_w RSS_w u_it",
    "\x00\x07\ud800 \ufeff \ufffe 🐝 蜂蜜 اَلْعَرَبِيَّةُ",
    "--- `` '' ,, << >> ?` !` \"q\" 'q'",
    "[opt] * ]",
    "$$ \\( \\[ \\) ]]> --> <!-- {{ x }} {% y %}",
    "1. one",
    "# heading",
    "- point",
    "+ point",
    "===",
    "> quote",
    "    code",
    "http://x.invalid www.x.invalid a@x.invalid",
    "",
    " ",
)

SVG = """<?xml version="1.0" encoding="utf-8" standalone="no"?>
<!DOCTYPE svg PUBLIC "-//W3C//DTD SVG 1.1//EN" "http://www.w3.org/Graphics/SVG/1.1/DTD/svg11.dtd">
<svg xmlns:xlink="http://www.w3.org/1999/xlink" width="360pt" height="150pt" viewBox="0 0 360 150"
 xmlns="http://www.w3.org/2000/svg" version="1.1" onload="window.pwned = 1">
<metadata><x>y</x></metadata><script>window.pwned = 1</script>
<defs><style type="text/css">*{stroke-linejoin: round; stroke-linecap: butt}</style>
<clipPath id="p1"><rect x="0" y="0" width="360" height="150"/></clipPath></defs>
<g id="figure_1"><rect width="360" height="150" style="fill: #ffffff"/>
<g clip-path="url(#p1)"><path id="m1" d="M20 130 L340 20" style="fill: none; stroke: #0b5a6b; stroke-width: 2"/>
<use xlink:href="#m1" x="0" y="9"/><use xlink:href="http://x.invalid/s.svg#m"/>
<image xlink:href="http://x.invalid/i.png"/><a xlink:href="javascript:alert(1)"><text>link</text></a>
<rect style="fill: url(http://x.invalid/p)"/></g>
<text x="30" y="30" style="font: 10px sans-serif">forage &lt; feeding</text></g></svg>"""

ROUTES = (
    ("pooled", 26.285685493, 2.094987, "reference point", ""),
    ("within", float("nan"), float("nan"), "not available", "does not vary within units"),
    ("swamy_arora", 21.1297, 1.95, "visible", "gap of +1 standard errors"),
    ("wansbeek_kapteyn", -0.00517644, 0.00225944, "identical", "identity 13"),
    ("minque_0", float("inf"), 1.2e-9, "visible", ""),
)
LEDGER = Table(
    "ledger",
    "Every route for every term",
    ("term", "route", "estimate", "standard error", "lower", "upper", "gap", "gap (se)", "class", "reason"),
    tuple(
        (term, route, estimate, error, estimate - 2 * error, estimate + 2 * error, -estimate, 0.5, kind, why)
        for term in ("Intercept", "forage", "feeding")
        for route, estimate, error, kind, why in ROUTES
    ),
    notes=("Gap: estimate less that of reml, in σ_α² or not.",),
)
SIZES = Table(
    "sizes",
    "Shrinkage by unit",
    ("apiary", "rows", "effect", "shrinkage"),
    tuple((f"unit {at}", at, (at - 30) / 7, at / (at + 1)) for at in range(60)),
)
WIDE = Table(
    "wide",
    "Correlations",
    ("term", *(f"column_{at}" for at in range(24))),
    tuple((f"term {j}", *((at * j - 30) / 37 for at in range(24))) for j in range(4)),
)
SENTENCE = (
    "Not rejected at 0.05; not rejecting is not evidence for the assumption, whatever the statistic may be. "
)
AUDIT = Table(
    "audit",
    "The audit, row by row",
    ("assumption", "evidence", "statistic", "p", "consequence", "conclusion"),
    tuple(
        (f"assumption {at}", "within minus reml", 1.5 * at, 0.5, SENTENCE, SENTENCE * 3) for at in range(3)
    ),
)

PLAIN = Document(
    "Methods appendix: honey",
    (
        Heading("Model"),
        Paragraph("A random-intercept model for honey; the variances are σ_α² = 14.13 and σ_u² = -15.54."),
        Formula(
            r"y_{it} = x_{it}'\beta + \alpha_i + u_{it},\qquad \psi = \sigma_\alpha^2/\sigma_u^2",
            "y_it = x_it'β + α_i + u_it,   ψ = σ_α²/σ_u²",
        ),
        Paragraph("All routes agree together when the covariance model is wrong.", "caution"),
        Heading("Estimates"),
        LEDGER,
        Heading("Which rows", 2),
        Bullets(("315 of 322 rows used", "-0.5 is a number")),
        SIZES,
        Heading("Much deeper", 4),
        WIDE,
        Heading("Assumptions"),
        AUDIT,
        Heading("Pictures"),
        Picture("path", SVG, "Forage along the path: flat near 0.235.", "The path of forage"),
        Picture("path", SVG, "Feeding along the path: rising.", "The path of feeding"),
        Heading("Run it again"),
        Code("mixbridge check honey.csv --formula 'honey ~ forage' --unit apiary\n  second   line"),
    ),
)


def document_of(text: str) -> Document:
    """Return a document with one text in every place that a user can fill."""
    return Document(
        text,
        (
            Heading(text),
            Paragraph(text),
            Paragraph(text, "caution"),
            Bullets((text, "last")),
            Formula("x", text),
            Code(text),
            Table("names", text, ("name", text), ((text, 1.5), ("b", -2.25)), notes=(text,)),
            Picture("picture", SVG, text, text),
        ),
    )


def hostile_document() -> Document:
    """Return one document with all bad names."""
    table = Table(
        "names",
        f"Names as users give them {HOSTILE[0]}",
        ("name", "value", HOSTILE[2]),
        tuple((name, at + 0.123456789, name) for at, name in enumerate(HOSTILE)),
    )
    blocks = [
        block for name in HOSTILE for block in (Heading(name, 2), Paragraph(name), Paragraph(name, "caution"))
    ]
    rest = (Bullets(HOSTILE), Code("\n".join(HOSTILE)), Code("``` ```` \\end{verbatim}"))
    return Document(f"Names {HOSTILE[1]}", (table, *blocks, *rest, Picture("p", SVG, HOSTILE[1], HOSTILE[1])))
