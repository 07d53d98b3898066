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

/// Terms and what they are.
pub(super) fn list(items: &[(&str, String)]) -> String {
    let items: String =
        items.iter().map(|(term, text)| format!("<dt>{}</dt><dd>{}</dd>", escape(term), escape(text))).collect();
    format!("<dl>{items}</dl>")
}

/// What stands in a cell of a table, as plain text: it is escaped here.
#[derive(Clone, Debug, PartialEq, Eq)]
pub(super) enum Cell {
    /// Words: to the left, and broken where they must.
    Words(String),
    /// A number: to the right, never broken.
    Number(String),
    /// A verdict: words with a sign of their own, so that colour is not needed.
    Verdict(String),
}

impl Cell {
    fn html(&self, is_heading: bool) -> String {
        let (class, text) = match self {
            Self::Words(text) => ("w", escape(text)),
            Self::Number(text) => ("n", escape(text)),
            Self::Verdict(text) => ("w", verdict(text)),
        };
        if is_heading {
            format!("<th scope=\"row\" class=\"{class}\">{text}</th>")
        } else {
            format!("<td class=\"{class}\">{text}</td>")
        }
    }
}

fn verdict(word: &str) -> String {
    let sign = match word {
        "good" => "●",
        "marked" => "△",
        "refused" => "×",
        _ => return escape(word),
    };
    format!("<span class=\"{word}\"><span aria-hidden=\"true\">{sign}</span>&nbsp;{word}</span>")
}

/// A table with caption and headings of columns and rows.
pub(super) fn table(caption: &str, headings: &[&str], rows: &[Vec<Cell>]) -> String {
    let is_number =
        |index: usize| rows.first().and_then(|row| row.get(index)).is_some_and(|c| matches!(c, Cell::Number(_)));
    let heads: String = headings
        .iter()
        .enumerate()
        .map(|(index, heading)| {
            let class = if is_number(index) { "n" } else { "w" };
            format!("<th scope=\"col\" class=\"{class}\">{}</th>", escape(heading))
        })
        .collect();
    let row = |row: &Vec<Cell>| {
        let cells: String = row.iter().enumerate().map(|(index, cell)| cell.html(index == 0)).collect();
        format!("<tr>{cells}</tr>\n")
    };
    let rows: String = rows.iter().map(row).collect();
    format!(
        "<div class=\"scroll\" tabindex=\"0\" role=\"region\" aria-label=\"{0}\"><table><caption>{0}</caption><thead><tr>{heads}</tr></thead><tbody>\n{rows}</tbody></table></div>\n",
        escape(caption)
    )
}

const STYLE: &str = "
:root { color-scheme: light dark; --ink: #1d2226; --paper: #fff; --faint: #59636b; --line: #d5dade; --warn: #8f3500;
  --band: #145a78; --good: #006e3c; --doubt: #8f5200; --tint: #f3f5f6; }
@media (prefers-color-scheme: dark) { :root { --ink: #e6e9eb; --paper: #14181b; --faint: #a3adb4; --line: #373f45;
  --warn: #ffb27a; --band: #6fc0e0; --good: #62d196; --doubt: #f0b45c; --tint: #1c2226; } }
body { font: 1rem/1.5 system-ui, 'Segoe UI', 'Liberation Sans', Arial, sans-serif; color: var(--ink);
  background: var(--paper); max-width: 66rem; margin: 0 auto; padding: 1rem 1.2rem 4rem; }
h1 { font-size: 1.8rem; line-height: 1.2; margin: 0.6rem 0; }
h2 { font-size: 1.2rem; border-bottom: 2px solid var(--line); padding-bottom: 0.2rem; margin: 2.4rem 0 0.8rem; }
nav ul { list-style: none; padding: 0; display: flex; flex-wrap: wrap; gap: 0.2rem 1.1rem; font-size: 0.9rem; }
a { color: var(--band); }
p { max-width: 46rem; }
dl { display: grid; grid-template-columns: minmax(6rem, max-content) minmax(0, 1fr); gap: 0.2rem 1.2rem; margin: 0.8rem 0; }
dt { color: var(--faint); } dd { margin: 0; overflow-wrap: anywhere; }
.banner { border: 3px double var(--warn); color: var(--warn); padding: 0.5rem 0.8rem; font-weight: bold; max-width: none; }
.caution { border-left: 4px solid var(--warn); padding-left: 0.8rem; }
.verdicts { list-style: none; padding: 0; display: flex; flex-wrap: wrap; gap: 0.8rem; }
.verdicts li { border: 1px solid var(--line); border-top: 4px solid currentColor; background: var(--tint);
  padding: 0.3rem 0.9rem 0.5rem; min-width: 9rem; }
.verdicts b { font-size: 2rem; line-height: 1.2; font-variant-numeric: tabular-nums; }
.verdicts small { display: block; color: var(--faint); }
.good { color: var(--good); } .marked { color: var(--doubt); } .refused { color: var(--warn); }
.scroll { overflow-x: auto; }
table { border-collapse: collapse; font-size: 0.84rem; font-variant-numeric: tabular-nums; }
caption { text-align: left; color: var(--faint); padding: 0.3rem 0; }
th, td { padding: 0.16rem 0.9rem 0.16rem 0; border-bottom: 1px solid var(--line); vertical-align: top; }
.n { text-align: right; white-space: nowrap; } .w { text-align: left; overflow-wrap: break-word; } td.w:last-child { min-width: 15rem; }
th[scope=row] { font-weight: 600; white-space: nowrap; }
tbody tr:nth-child(even) { background: var(--tint); }
figure { margin: 0.8rem 0; }
figure svg, figure img { max-width: 100%; height: auto; display: block; }
figure svg { width: 100%; min-width: 34rem; } figure { overflow-x: auto; }
figcaption { color: var(--faint); font-size: 0.86rem; max-width: 60rem; }
.pictures { display: grid; grid-template-columns: repeat(auto-fill, minmax(16rem, 1fr)); gap: 1rem; }
svg [fill='#282828'] { fill: var(--ink); } svg [stroke='#282828'] { stroke: var(--ink); }
svg [fill='#145A78'] { fill: var(--band); } svg [stroke='#145A78'] { stroke: var(--band); }
svg [fill='#006E3C'] { fill: var(--good); } svg [stroke='#006E3C'] { stroke: var(--good); }
svg [fill='#AA5F00'] { fill: var(--doubt); } svg [stroke='#AA5F00'] { stroke: var(--doubt); }
svg [stroke='#E1E1E1'] { stroke: var(--line); } svg text { font-family: inherit; font-size: 30px; }
@page { margin: 14mm; }
@media print {
  :root { color-scheme: light; --ink: #000; --paper: #fff; --faint: #444; --line: #bbb; --warn: #8f3500; --band: #145a78;
    --good: #006e3c; --doubt: #8f5200; --tint: #fff; }
  body { max-width: none; font-size: 9.5pt; padding: 0; } nav { display: none; }
  h2 { break-after: avoid; } figure, tr, .verdicts, dl > * { break-inside: avoid; } figure svg { min-width: 0; max-height: 62mm; }
  section[aria-labelledby=frames] { break-before: page; }
  thead { display: table-header-group; } .scroll, figure { overflow: visible; } table { width: 100%; font-size: 7.5pt; }
  th, td { padding-right: 0.4rem; } td.w:last-child { min-width: 0; } details > * { display: block; }
}
";

/// The whole page.
pub(super) fn page(title: &str, simulated: bool, contents: &[(String, String)], body: &str) -> String {
    let mark = if simulated { "SIMULATED: " } else { "" };
    let banner = if simulated {
        "<p class=\"banner\" role=\"note\">SIMULATED. This run comes from an invented bench. Nothing in it is a measurement.</p>"
    } else {
        ""
    };
    let links: String =
        contents.iter().map(|(id, heading)| format!("<li><a href=\"#{id}\">{heading}</a></li>")).collect();
    let banner = format!("{banner}<nav aria-label=\"Contents\"><ul>{links}</ul></nav>");
    format!(
        "<!DOCTYPE html>\n<html lang=\"en\"><head><meta charset=\"utf-8\"><meta name=\"viewport\" content=\"width=device-width, initial-scale=1\">\
         <link rel=\"icon\" href=\"data:,\"><title>{mark}{0}</title><style>{STYLE}</style></head>\n<body><main><h1>{0}</h1>{banner}\n{body}</main></body></html>\n",
        escape(title)
    )
}

/// Anchor and heading (HTML) of every section in `body`.
pub(super) fn contents(body: &str) -> Vec<(String, String)> {
    let heading = |rest: &str| {
        let (id, rest) = rest.split_once("\">")?;
        let (heading, _) = rest.split_once("</h2>")?;
        Some((id.to_owned(), heading.to_owned()))
    };
    body.split("<h2 id=\"").skip(1).filter_map(heading).collect()
}
