//! Pages: one self-contained HTML file each. Pieces that every page is made of: sections, tiles of numbers, a figure that
//! flicks between two pictures, plots, heat maps, arrows, tables.

mod audit;
mod difference;
mod figure;
mod ledger;
mod plot;

pub use audit::audit_page;
pub use difference::difference_page;
use figure::{Paint, Range, flick, picture};
pub use ledger::{BandPictures, RunPictures, ledger_page};

use serde_json::Value;

/// What text must not be in HTML.
pub fn escape(text: &str) -> String {
    let mut out = String::with_capacity(text.len());
    for c in text.chars() {
        match c {
            '&' => out.push_str("&amp;"),
            '<' => out.push_str("&lt;"),
            '>' => out.push_str("&gt;"),
            '"' => out.push_str("&quot;"),
            '\'' => out.push_str("&#39;"),
            // Control characters in file names.
            c if c.is_control() && c != '\n' => out.push('\u{fffd}'),
            c => out.push(c),
        }
    }
    out
}

/// A whole page around its sections.
pub fn page(title: &str, lead: &str, body: &str, command: &[String]) -> String {
    let command = if command.is_empty() {
        String::new()
    } else {
        format!(
            "<p>Made by <code>{}</code>, version {}.</p>",
            escape(&command.join(" ")),
            env!("CARGO_PKG_VERSION")
        )
    };
    format!(
        "<!doctype html>\n<html lang=\"en\">\n<head>\n<meta charset=\"utf-8\">\n\
         <meta name=\"viewport\" content=\"width=device-width, initial-scale=1\">\n<title>{title}</title>\n\
         <link rel=\"icon\" href=\"data:,\">\n<style>\n{style}</style>\n</head>\n<body>\n\
         <header class=\"top\"><div><h1>{title}</h1><div class=\"soft\">{lead}</div></div>\
         <button class=\"theme\" type=\"button\">Dark page</button></header>\n<main>\n{body}</main>\n\
         <footer>{command}<p>Not a certified instrument. Where resampled data could hurt someone, follow local codes and \
         licensed practice.</p></footer>\n<script>\n{script}</script>\n</body>\n</html>\n",
        title = escape(title),
        lead = escape(lead),
        style = include_str!("style.css"),
        script = include_str!("script.js"),
    )
}

/// A section with its heading.
pub fn section(heading: &str, body: &str) -> String {
    format!("<section>\n<h2>{}</h2>\n{body}</section>\n", escape(heading))
}

/// Sentences as a list.
pub fn words(lines: &[String]) -> String {
    let items: String = lines.iter().map(|l| format!("<li>{}</li>\n", escape(l))).collect();
    format!("<ul class=\"words\">\n{items}</ul>\n")
}

/// One number at a glance.
pub struct Tile {
    /// What it is.
    pub name: String,
    /// The number, as text.
    pub value: String,
    /// What it means; may be empty.
    pub note: String,
    /// Whether a check on it held; `None` if there was none.
    pub holds: Option<bool>,
}

impl Tile {
    /// A tile without a check.
    pub fn new(name: &str, value: String, note: &str) -> Self {
        Tile { name: name.into(), value, note: note.into(), holds: None }
    }
}

/// Numbers side by side.
pub fn tiles(all: &[Tile]) -> String {
    let one = |t: &Tile| {
        let class = match t.holds {
            Some(true) => " class=\"good\"",
            Some(false) => " class=\"bad\"",
            None => "",
        };
        format!(
            "<div><dt>{}</dt><dd{class}>{}</dd><dd class=\"note\">{}</dd></div>\n",
            escape(&t.name),
            escape(&t.value),
            escape(&t.note)
        )
    };
    format!("<dl class=\"tiles\">\n{}</dl>\n", all.iter().map(one).collect::<String>())
}

/// Every key of an account with its value and what it means, where `meaning` knows it. Long lists are left to the JSON.
pub fn table(value: &Value, meaning: impl Fn(&str) -> Option<&'static str>) -> String {
    let mut rows = String::new();
    flatten("", value, &mut |key, text| {
        rows += &format!(
            "<tr><td class=\"key\">{}</td><td class=\"number\">{}</td><td>{}</td></tr>\n",
            escape(key),
            escape(text),
            meaning(key).unwrap_or("")
        );
    });
    format!(
        "<div class=\"wide\"><table><thead><tr><th scope=\"col\">key</th><th scope=\"col\">value</th>\
         <th scope=\"col\">meaning</th></tr></thead><tbody>\n{rows}</tbody></table></div>\n"
    )
}

fn flatten(key: &str, value: &Value, each: &mut impl FnMut(&str, &str)) {
    match value {
        Value::Object(map) => {
            for (k, v) in map {
                let name = if key.is_empty() { k.clone() } else { format!("{key}.{k}") };
                flatten(&name, v, each);
            }
        }
        Value::Array(list) if list.len() > 8 || list.iter().any(|v| v.is_object() || v.is_array()) => {
            if list.len() <= 4 && list.iter().all(Value::is_object) {
                for (i, v) in list.iter().enumerate() {
                    flatten(&format!("{key}[{i}]"), v, each);
                }
            } else {
                each(key, &format!("{} entries, in the JSON", list.len()));
            }
        }
        Value::Array(list) => each(key, &list.iter().map(Value::to_string).collect::<Vec<_>>().join(", ")),
        Value::String(text) => each(key, text),
        Value::Null => each(key, "–"),
        other => each(key, &other.to_string()),
    }
}

/// A fraction as a percentage with sense: `+0.012 %`, or a power of ten where that is clearer.
pub fn percent(v: f64) -> String {
    if v == 0.0 {
        "0".into()
    } else if v.abs() < 1e-5 {
        format!("{v:+.1e}")
    } else {
        format!("{:+.3} %", 100.0 * v)
    }
}
