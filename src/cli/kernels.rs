//! `regauge kernels`: what there is to choose from.

use super::{Outcome, print, print_json};
use crate::error::Result;
use crate::kernel::{FAMILIES, Kernel};
use clap::Args;

/// The kernels, with support, order, regularity and poles.
#[derive(Args)]
#[command(after_help = "Examples:\n  regauge kernels\n  regauge kernels --json\n\n\
    taps: samples under the kernel along one axis. order: the error falls as the pixel size to this power.\n\
    regularity: continuous derivatives; -1 jumps. poles: of the prefilter, where samples become coefficients first.")]
pub struct Arguments {
    /// Print as JSON
    #[arg(long)]
    json: bool,
}

pub fn run(a: &Arguments) -> Result<Outcome> {
    let mut rows = Vec::new();
    for family in FAMILIES {
        for name in family.listed {
            rows.push((family, Kernel::parse(name)?));
        }
    }
    if a.json {
        let list: Vec<_> = rows
            .iter()
            .map(|(family, k)| {
                serde_json::json!({
                    "name": k.name(), "taps": k.taps(), "order": k.order(), "regularity": k.regularity(), "poles": k.poles(),
                    "interpolating": k.is_interpolating(), "prefiltered": k.is_prefiltered(),
                    "parameters": family.parameters, "about": family.about,
                })
            })
            .collect();
        print_json(&serde_json::json!({ "kernels": list }))?;
        return Ok(Outcome::Done);
    }
    let number = |v: Option<String>, none: &str| v.unwrap_or_else(|| none.to_owned());
    let mut text = format!("{:<22}{:>5}{:>7}{:>12}  {}\n", "name", "taps", "order", "regularity", "poles");
    for (_, k) in &rows {
        let poles: Vec<String> = k.poles().iter().map(|p| format!("{p:.5}")).collect();
        let line = format!(
            "{:<22}{:>5}{:>7}{:>12}  {}",
            k.name(),
            number(k.taps().map(|t| t.to_string()), "all"),
            number(k.order().map(|o| o.to_string()), "any"),
            number(k.regularity().map(|r| r.to_string()), "all"),
            poles.join(" ")
        );
        text += line.trim_end();
        text.push('\n');
    }
    text.push('\n');
    for family in FAMILIES {
        let name = match family.parameters {
            "" => family.name.to_owned(),
            p => format!("{}:{p}", family.name),
        };
        text += &format!("{name:<22}{}\n", family.about);
    }
    print(&text)?;
    Ok(Outcome::Done)
}
