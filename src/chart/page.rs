//! Pictures on one page of HTML: nothing is fetched, nothing runs, every text is escaped.

use std::fmt::Write;

use super::pen::escaped;
use super::{Svg, Table, style};

/// A part of a page under a heading of its own.
#[derive(Clone, Debug, PartialEq)]
pub struct Section {
    /// Its heading.
    pub heading: String,
    /// A sentence below it; may be empty.
    pub note: String,
    /// Its pictures.
    pub figures: Vec<Figure>,
}

/// A picture on a page.
#[derive(Clone, Debug, PartialEq)]
pub struct Figure {
    /// Name of the file beside the page that holds the same picture; of letters that need no escape in an address.
    pub file: String,
    /// The finding.
    pub title: String,
    /// The picture itself, drawn without its own style; without it the page only links to the file.
    pub svg: Option<Svg>,
}

/// The page. `lead`: a sentence under the title.
pub fn page(title: &str, lead: &str, sections: &[Section]) -> String {
    let mut html = format!(
        "<!DOCTYPE html>\n<html lang=\"en\">\n<head>\n<meta charset=\"utf-8\">\n\
         <meta name=\"viewport\" content=\"width=device-width, initial-scale=1\">\n\
         <meta http-equiv=\"Content-Security-Policy\" content=\"default-src 'none'; style-src 'unsafe-inline'\">\n\
         <title>{}</title>\n<style>{SHEET}{}</style>\n</head>\n<body>\n<h1>{}</h1>\n<p>{}</p>\n",
        escaped(title),
        style(),
        escaped(title),
        escaped(lead)
    );
    if sections.len() > 1 {
        html.push_str("<nav aria-label=\"Streams\"><ul>\n");
        for (i, section) in sections.iter().enumerate() {
            let _ = writeln!(html, "<li><a href=\"#s{i}\">{}</a></li>", escaped(&section.heading));
        }
        html.push_str("</ul></nav>\n");
    }
    for (i, section) in sections.iter().enumerate() {
        let _ = writeln!(html, "<section id=\"s{i}\">\n<h2>{}</h2>", escaped(&section.heading));
        if !section.note.is_empty() {
            let _ = writeln!(html, "<p>{}</p>", escaped(&section.note));
        }
        section.figures.iter().for_each(|figure| put(&mut html, figure));
        html.push_str("</section>\n");
    }
    html.push_str("</body>\n</html>\n");
    html
}

fn put(html: &mut String, figure: &Figure) {
    let (title, file) = (escaped(&figure.title), escaped(&figure.file));
    let Some(svg) = &figure.svg else {
        let _ = writeln!(html, "<p><a href=\"{file}\">{title}</a></p>");
        return;
    };
    let _ = writeln!(html, "<figure>\n{}\n<figcaption>{}", svg.markup, escaped(&svg.summary));
    table(html, &svg.table);
    let _ = writeln!(html, "<a href=\"{file}\">This picture alone</a></figcaption>\n</figure>");
}

fn table(html: &mut String, table: &Table) {
    if table.rows.is_empty() {
        return;
    }
    html.push_str("<details><summary>The numbers</summary><table><thead><tr>");
    for head in &table.columns {
        let _ = write!(html, "<th scope=\"col\">{}</th>", escaped(head));
    }
    html.push_str("</tr></thead><tbody>\n");
    for row in &table.rows {
        html.push_str("<tr>");
        for (i, cell) in row.iter().enumerate() {
            let cell = escaped(cell);
            let _ = match i {
                0 => write!(html, "<th scope=\"row\">{cell}</th>"),
                _ => write!(html, "<td>{cell}</td>"),
            };
        }
        html.push_str("</tr>\n");
    }
    html.push_str("</tbody></table></details>\n");
}

/// The colours are those of the pictures' paper, text and lines.
const SHEET: &str = ":root{color-scheme:light dark;--paper:#fbfaf5;--text:#1b2529;--soft:#55626a;--line:#e3e2d9;\
    --link:#1d4e79}\
    body{margin:0 auto;padding:1rem;max-width:54rem;background:var(--paper);color:var(--text);\
    font:1rem/1.5 system-ui,sans-serif}\
    h1,h2{line-height:1.2;overflow-wrap:anywhere}a{color:var(--link)}\
    nav ul{columns:14rem;padding-left:1.2rem;overflow-wrap:anywhere}\
    figure{margin:1.5rem 0 2.5rem;break-inside:avoid}\
    figcaption{color:var(--soft);font-size:.9rem}\
    table{border-collapse:collapse;font-variant-numeric:tabular-nums}\
    th,td{text-align:left;padding:.15rem .8rem .15rem 0;border-bottom:1px solid var(--line);font-weight:normal}\
    @media screen and (prefers-color-scheme:dark){:root{--paper:#12181c;--text:#e8ecea;--soft:#a7b3b8;--line:#283136;\
    --link:#85bff0}}";

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn nothing_gets_out_of_its_text() {
        let bad = "<script>\"&'</title>";
        let figure = Figure { file: "a-rate.svg".into(), title: bad.into(), svg: None };
        let section = Section { heading: bad.into(), note: bad.into(), figures: vec![figure] };
        let html = page(bad, bad, &[section.clone(), section]);
        assert!(!html.contains("<script") && html.matches("</title>").count() == 1, "{html}");
    }
}
