//! The page around the sections.

/// Text as HTML.
pub(super) fn escape(text: &str) -> String {
    let mut escaped = String::with_capacity(text.len());
    for c in text.chars() {
        match c {
            '&' => escaped.push_str("&amp;"),
            '<' => escaped.push_str("&lt;"),
            '>' => escaped.push_str("&gt;"),
            '"' => escaped.push_str("&quot;"),
            '\'' => escaped.push_str("&#39;"),
            c => escaped.push(c),
        }
    }
    escaped
}

/// A section with its heading.
pub(super) fn section(id: &str, heading: &str, body: &str) -> String {
    format!("<section aria-labelledby=\"{id}\"><h2 id=\"{id}\">{}</h2>{body}</section>\n", escape(heading))
}

/// A table with caption and column headings. Cells are HTML already.
pub(super) fn table(caption: &str, headings: &[&str], rows: &[Vec<String>]) -> String {
    let heads: String = headings.iter().map(|heading| format!("<th scope=\"col\">{}</th>", escape(heading))).collect();
    let rows: String = rows
        .iter()
        .map(|row| {
            let cells: String = row
                .iter()
                .enumerate()
                .map(
                    |(index, cell)| {
                        if index == 0 { format!("<th scope=\"row\">{cell}</th>") } else { format!("<td>{cell}</td>") }
                    },
                )
                .collect();
            format!("<tr>{cells}</tr>\n")
        })
        .collect();
    format!(
        "<div class=\"scroll\" tabindex=\"0\" role=\"region\" aria-label=\"{0}\"><table><caption>{0}</caption><thead><tr>{heads}</tr></thead><tbody>\n{rows}</tbody></table></div>\n",
        escape(caption)
    )
}

const STYLE: &str = "
:root { color-scheme: light dark; --ink: #1c1b19; --paper: #fdfcf9; --faint: #6a665e; --line: #d9d4c8; --warn: #8a3b00; }
@media (prefers-color-scheme: dark) {
  :root { --ink: #ebe7dd; --paper: #181713; --faint: #a9a394; --line: #3c392f; --warn: #ffb070; }
}
body { font: 1rem/1.5 Georgia, 'Times New Roman', serif; color: var(--ink); background: var(--paper);
  max-width: 60rem; margin: 0 auto; padding: 1rem 1.2rem 4rem; }
h1 { font-size: 1.9rem; line-height: 1.2; margin: 0.6rem 0 0.2rem; }
h2 { font-size: 1.25rem; border-bottom: 1px solid var(--line); padding-bottom: 0.2rem; margin-top: 2.4rem; }
p, dl { max-width: 46rem; }
dl { display: grid; grid-template-columns: max-content 1fr; gap: 0.15rem 1rem; }
dt { color: var(--faint); } dd { margin: 0; overflow-wrap: anywhere; }
.banner { border: 3px double var(--warn); color: var(--warn); padding: 0.5rem 0.8rem; font-weight: bold; }
.caution { border-left: 4px solid var(--warn); padding-left: 0.8rem; }
.scroll { overflow-x: auto; }
table { border-collapse: collapse; font-size: 0.86rem; font-variant-numeric: tabular-nums; }
caption { text-align: left; color: var(--faint); padding: 0.3rem 0; }
th, td { padding: 0.15rem 0.7rem 0.15rem 0; border-bottom: 1px solid var(--line); text-align: right; white-space: nowrap; }
th[scope=row], td.words, th.words { text-align: left; } td.words { white-space: normal; }
th[scope=col]:first-child { text-align: left; }
figure { margin: 1rem 0; background: #fff; padding: 0.4rem; border: 1px solid var(--line); }
figure svg { width: 100%; height: auto; display: block; }
figcaption { color: #444; font-size: 0.86rem; padding: 0.2rem 0.4rem; }
code { font-size: 0.85em; overflow-wrap: anywhere; }
@media print {
  body { max-width: none; font-size: 10pt; } section { break-inside: auto; } figure, tr { break-inside: avoid; }
  thead { display: table-header-group; } .scroll { overflow: visible; } th, td { padding-right: 0.35rem; font-size: 7.5pt; }
}
";

/// The whole page.
pub(super) fn page(title: &str, simulated: bool, body: &str) -> String {
    let mark = if simulated { "SIMULATED: " } else { "" };
    let banner = if simulated {
        "<p class=\"banner\" role=\"note\">SIMULATED. This run comes from an invented bench. Nothing in it is a measurement.</p>"
    } else {
        ""
    };
    format!(
        "<!DOCTYPE html>\n<html lang=\"en\"><head><meta charset=\"utf-8\"><meta name=\"viewport\" content=\"width=device-width, initial-scale=1\">\
         <link rel=\"icon\" href=\"data:,\"><title>{mark}{0}</title><style>{STYLE}</style></head>\n<body><main><h1>{0}</h1>{banner}\n{body}</main></body></html>\n",
        escape(title)
    )
}
