//! OME-XML in the image description: pixel size and channel names read, and corrected for a new grid.
//!
//! The schema says nothing of the origin; the centre of the first pixel is put at world (0, 0).

use crate::grid::{Grid, World};
use crate::raster::SampleType;

/// Whether a description is OME-XML.
pub fn is_ome(description: &str) -> bool {
    description.contains("<OME") && tag(description, "Pixels").is_some()
}

/// The text between `<Name` and its closing `>`, and where it begins.
fn tag<'a>(xml: &'a str, name: &str) -> Option<(usize, &'a str)> {
    let mut from = 0;
    loop {
        let start = from + xml.get(from..)?.find(&format!("<{name}"))? + 1 + name.len();
        let rest = xml.get(start..)?;
        if rest.starts_with([' ', '\t', '\n', '\r', '/', '>']) {
            let mut quote = None;
            let end = rest.char_indices().find(|(_, c)| match quote {
                Some(q) => {
                    if *c == q {
                        quote = None
                    }
                    false
                }
                None if *c == '"' || *c == '\'' => {
                    quote = Some(*c);
                    false
                }
                None => *c == '>',
            })?;
            return Some((start, &rest[..end.0]));
        }
        from = start;
    }
}

/// The range of an attribute's value within a tag's text.
fn attribute(text: &str, name: &str) -> Option<std::ops::Range<usize>> {
    let mut from = 0;
    loop {
        let at = from + text.get(from..)?.find(name)?;
        from = at + name.len();
        let before = text[..at].chars().next_back().is_none_or(char::is_whitespace);
        let after = text[from..].trim_start();
        if !before || !after.starts_with('=') {
            continue;
        }
        let value = after[1..].trim_start();
        let quote = value.chars().next().filter(|c| *c == '"' || *c == '\'')?;
        let start = text.len() - value.len() + 1;
        let len = text[start..].find(quote)?;
        return Some(start..start + len);
    }
}

fn get(xml: &str, element: &str, name: &str) -> Option<String> {
    let (_, text) = tag(xml, element)?;
    attribute(text, name).map(|r| unescape(&text[r]))
}

fn unescape(s: &str) -> String {
    s.replace("&lt;", "<")
        .replace("&gt;", ">")
        .replace("&quot;", "\"")
        .replace("&apos;", "'")
        .replace("&#181;", "µ")
        .replace("&amp;", "&")
}

/// World affine (scale only) and unit from PhysicalSizeX and PhysicalSizeY.
pub fn physical_size(xml: &str) -> Option<(World, String)> {
    let size = |name: &str| {
        get(xml, "Pixels", name)?.trim().parse::<f64>().ok().filter(|v| *v > 0.0 && v.is_finite())
    };
    let (x, y) = (size("PhysicalSizeX")?, size("PhysicalSizeY")?);
    let unit = |name: &str| get(xml, "Pixels", name).unwrap_or_else(|| "µm".into());
    let (ux, uy) = (unit("PhysicalSizeXUnit"), unit("PhysicalSizeYUnit"));
    (ux == uy).then_some(([[x, 0.0, 0.0], [0.0, y, 0.0]], ux))
}

/// Names for `bands` bands, page by page in the order of dimensions after X and Y; empty if there are none.
pub fn band_names(xml: &str, bands: usize) -> Vec<String> {
    let mut channels = Vec::new();
    let mut from = 0;
    while let Some((start, text)) = xml.get(from..).and_then(|rest| tag(rest, "Channel")) {
        let name = attribute(text, "Name").or_else(|| attribute(text, "ID")).map(|r| unescape(&text[r]));
        channels.push(name.unwrap_or_default());
        from += start;
    }
    let count =
        |name: &str| get(xml, "Pixels", name).and_then(|v| v.parse::<usize>().ok()).unwrap_or(1).max(1);
    let (c, z, t) = (count("SizeC"), count("SizeZ"), count("SizeT"));
    if channels.len() != c
        || c.saturating_mul(z).saturating_mul(t) != bands
        || channels.iter().all(String::is_empty)
    {
        return Vec::new();
    }
    let order = get(xml, "Pixels", "DimensionOrder").unwrap_or_else(|| "XYCZT".into());
    let axes: Vec<char> = order.chars().filter(|a| "CZT".contains(*a)).collect();
    (0..bands)
        .map(|band| {
            let mut rest = band;
            let mut index = [0usize; 3];
            for a in &axes {
                let (slot, n) = match a {
                    'C' => (0, c),
                    'Z' => (1, z),
                    _ => (2, t),
                };
                index[slot] = rest % n;
                rest /= n;
            }
            let mut name = channels[index[0].min(c - 1)].clone();
            if z > 1 {
                name += &format!(" z{}", index[1]);
            }
            if t > 1 {
                name += &format!(" t{}", index[2]);
            }
            name
        })
        .collect()
}

/// The description with sizes, type and pixel size of a new grid.
pub fn corrected(xml: &str, grid: &Grid, sample_type: SampleType) -> String {
    let (height, width) = grid.pixel_size();
    let kind = match sample_type {
        SampleType::U8 => "uint8",
        SampleType::I8 => "int8",
        SampleType::U16 => "uint16",
        SampleType::I16 => "int16",
        SampleType::U32 => "uint32",
        SampleType::I32 => "int32",
        SampleType::F32 => "float",
        SampleType::F64 => "double",
    };
    let mut values = vec![
        ("SizeX", grid.columns.to_string()),
        ("SizeY", grid.rows.to_string()),
        ("Type", kind.to_owned()),
        ("SignificantBits", (8 * sample_type.bytes()).to_string()),
    ];
    if grid.world.is_some() {
        values.push(("PhysicalSizeX", width.to_string()));
        values.push(("PhysicalSizeY", height.to_string()));
        if let Some(unit) = &grid.unit {
            values.push(("PhysicalSizeXUnit", unit.clone()));
            values.push(("PhysicalSizeYUnit", unit.clone()));
        }
    }
    let mut out = xml.to_owned();
    for (name, value) in values {
        let place = tag(&out, "Pixels")
            .and_then(|(start, text)| attribute(text, name).map(|r| start + r.start..start + r.end));
        if let Some(range) = place {
            out.replace_range(range, &value);
        }
    }
    out
}
