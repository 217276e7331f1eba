//! What a displacement looks like, and what makes such a one.

use super::field::Field;
use crate::map::Map;
use serde::Serialize;

/// The kind of a displacement over the frame.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Serialize)]
#[serde(rename_all = "kebab-case")]
pub enum Kind {
    /// Nothing beyond the error and a fiftieth of a pixel.
    None,
    /// The same everywhere.
    Constant,
    /// Grows linearly away from a line or a point, along the axes.
    Scale,
    /// Turns with the position.
    Turn,
    /// Linear, but neither a scale nor a turn.
    Linear,
    /// Tiles disagree with every linear field.
    Irregular,
}

/// What was recognised.
#[derive(Clone, Debug, PartialEq, Serialize)]
pub struct Verdict {
    /// The kind.
    pub kind: Kind,
    /// What it is, in words; a part of a sentence.
    pub words: String,
    /// The likely cause, where there is one.
    pub cause: Option<String>,
    /// Displacement (rows, columns) at the first pixel of AFTER if the centres of corner pixels had been aligned instead of
    /// outer edges; null where the rasters do not share their outer edges.
    pub corner_centres: Option<[f64; 2]>,
}

/// Displacements closer than this to a known one are taken for it, input pixels.
const LIKE: f64 = 0.03;

/// Judges a field. `back` takes AFTER's positions to BEFORE's; sizes are (rows, columns).
pub fn judge(field: &Field, back: &Map, before: (usize, usize), after: (usize, usize)) -> Verdict {
    let corner_centres = predict_corner_centres(back, before, after);
    let verdict = |kind, words: String, cause: Option<&str>| Verdict {
        kind,
        words,
        cause: cause.map(str::to_owned),
        corner_centres,
    };
    let c = field.at_centre;
    let bound = (4.0 * field.sigma).max(0.02);
    if field.scatter > 0.1 && field.scatter > 6.0 * field.sigma {
        let words =
            format!("an irregular field: tiles scatter by {:.2} px about the best linear one", field.scatter);
        return verdict(
            Kind::Irregular,
            words,
            Some("a map that bends, or content that changed between the two"),
        );
    }
    if field.is_uneven() {
        return uneven(field, back, after, corner_centres, verdict);
    }
    if c[0].hypot(c[1]) <= bound {
        let words = if bound > 0.1 { "too uncertain to be told from none" } else { "no displacement" };
        return verdict(Kind::None, words.into(), None);
    }
    let step = steps(back);
    let names: Vec<Slip> = [0, 1].iter().map(|&k| slip(c[k], step[k], bound.max(LIKE))).collect();
    let axis = ["rows", "columns"];
    let named: Vec<usize> =
        [0, 1].into_iter().filter(|k| !matches!(names[*k], Slip::None | Slip::Other)).collect();
    let other = names.contains(&Slip::Other);
    if named.is_empty() || other {
        return verdict(
            Kind::Constant,
            "a constant slip of no usual size".into(),
            Some("a wrong origin or shift"),
        );
    }
    let words = match (&named[..], names[0] == names[1]) {
        ([_, _], true) => format!("a constant slip of {} on both axes", names[0].words()),
        ([k], _) => format!("a constant slip of {} along {} only", names[*k].words(), axis[*k]),
        _ => format!(
            "a constant slip of {} along rows and {} along columns",
            names[0].words(),
            names[1].words()
        ),
    };
    let half =
        named.iter().any(|k| matches!(names[*k], Slip::HalfInput | Slip::HalfOutput | Slip::FirstCentres));
    let cause = if half {
        "pixel centres were taken for pixel edges, or an area grid was read as points (or the other way round)"
    } else {
        "rows or columns were counted from 1 instead of 0, or a line was dropped"
    };
    verdict(Kind::Constant, words, Some(cause))
}

fn uneven(
    field: &Field,
    back: &Map,
    after: (usize, usize),
    corner_centres: Option<[f64; 2]>,
    verdict: impl Fn(Kind, String, Option<&str>) -> Verdict,
) -> Verdict {
    let g = &field.gradient;
    let bound = (4.0 * field.gradient_sigma).max(0.02);
    let c = field.at_centre;
    let h = field.extent.half;
    if g[0][1].abs() <= bound && g[1][0].abs() <= bound {
        let zero = c[0].abs().max(c[1].abs()) <= (4.0 * field.sigma).max(0.02);
        let mut words = format!(
            "a scale error: displacement runs linearly {} and reaches {:+.3} px (rows), {:+.3} px (columns) at the lower right edges",
            if zero { "through zero in the middle" } else { "over the frame" },
            c[0] + g[0][0],
            c[1] + g[1][1],
        );
        if let Some(predicted) = corner_centres {
            let (r, k) = back.apply(0.0, 0.0);
            let found = field.at(r, k);
            let like = bound.max(LIKE);
            if (found.0 - predicted[0]).abs() < like && (found.1 - predicted[1]).abs() < like {
                words += &format!(
                    "; at the first pixel {:+.3}, {:+.3} px, where corner centres aligned would make {:+.3}, {:+.3} px",
                    found.0, found.1, predicted[0], predicted[1]
                );
                return verdict(
                    Kind::Scale,
                    words,
                    Some(
                        "the centres of the corner pixels were aligned instead of the outer edges, as scipy.ndimage.zoom does by default",
                    ),
                );
            }
            words += &format!(
                "; corner centres aligned would make {:+.3}, {:+.3} px at the first pixel, found {:+.3}, {:+.3} px",
                predicted[0], predicted[1], found.0, found.1
            );
        }
        let rounding = (
            g[0][0] / h[0].max(0.5) * back_extent(back, after).0,
            g[1][1] / h[1].max(0.5) * back_extent(back, after).1,
        );
        let cause = if rounding.0.abs().max(rounding.1.abs()) < 1.5 {
            "a factor that was rounded to whole pixels, or a pixel size that is slightly wrong"
        } else {
            "a wrong scale or pixel size"
        };
        return verdict(Kind::Scale, words, Some(cause));
    }
    // In pixels per pixel; a small turn has opposite shears.
    let (shear_r, shear_c) = (g[0][1] / h[1].max(0.5), g[1][0] / h[0].max(0.5));
    let is_turn = (shear_r + shear_c).abs() < 0.2 * (shear_r - shear_c).abs()
        && [(0, 1), (1, 0)].iter().all(|&(k, other)| g[k][k].abs() <= bound.max(0.1 * g[k][other].abs()));
    if is_turn {
        // Right (0, 1) goes up for a counter-clockwise turn.
        let degrees = (0.5 * (shear_c - shear_r)).to_degrees();
        let words = format!(
            "a turn: content is turned by {degrees:+.3} degrees (+ = counter-clockwise as displayed)"
        );
        return verdict(Kind::Turn, words, Some("a wrong angle, or a turn about another place"));
    }
    verdict(
        Kind::Linear,
        format!(
            "a linear field: from the middle to the lower edge {:+.3}, {:+.3} px are added, to the right edge {:+.3}, {:+.3} px",
            g[0][0], g[1][0], g[0][1], g[1][1]
        ),
        Some("a wrong map"),
    )
}

/// Rows and columns of BEFORE that AFTER covers.
fn back_extent(back: &Map, after: (usize, usize)) -> (f64, f64) {
    let b = back.bounds((-0.5, after.0 as f64 - 0.5), (-0.5, after.1 as f64 - 0.5));
    (b.rows.1 - b.rows.0, b.columns.1 - b.columns.0)
}

/// Input pixels per pixel of AFTER along the input's rows and columns.
fn steps(back: &Map) -> [f64; 2] {
    let j = back.jacobian(0.0, 0.0);
    [j[0][0].hypot(j[0][1]), j[1][0].hypot(j[1][1])]
}

/// Displacement at AFTER's first pixel if the centres of the corner pixels of both rasters had been laid on each other.
pub fn predict_corner_centres(back: &Map, before: (usize, usize), after: (usize, usize)) -> Option<[f64; 2]> {
    let axes = back.as_axes().filter(|a| !a.swapped && a.rows.0 > 0.0 && a.columns.0 > 0.0)?;
    if after.0 < 2 || after.1 < 2 || before.0 < 2 || before.1 < 2 {
        return None;
    }
    // The first pixel then shows the first sample, at 0, and lies at the offset. That is so for the last one too only where
    // both rasters share their outer edges.
    let same_edges = |n: usize, m: usize, (step, offset): (f64, f64)| {
        (step * m as f64 - n as f64).abs() < 0.02 && (offset - 0.5 * (step - 1.0)).abs() < 0.02
    };
    (same_edges(before.0, after.0, axes.rows) && same_edges(before.1, after.1, axes.columns))
        .then_some([axes.rows.1, axes.columns.1])
}

/// Slips that have a name.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
enum Slip {
    None,
    HalfInput,
    HalfOutput,
    FirstCentres,
    Whole(i32),
    Other,
}

impl Slip {
    fn words(self) -> String {
        match self {
            Slip::None => "nothing".into(),
            Slip::HalfInput => "half an input pixel".into(),
            Slip::HalfOutput => "half an output pixel".into(),
            Slip::FirstCentres => {
                "half the difference of both pixel sizes (first pixels' centres aligned instead of edges)"
                    .into()
            }
            Slip::Whole(1) => "one input pixel".into(),
            Slip::Whole(n) => format!("{n} input pixels"),
            Slip::Other => "no usual size".into(),
        }
    }
}

fn slip(d: f64, step: f64, like: f64) -> Slip {
    let d = d.abs();
    let near = |v: f64| (d - v).abs() < like;
    if near(0.0) {
        Slip::None
    } else if near(0.5) {
        Slip::HalfInput
    } else if near(0.5 * step) {
        Slip::HalfOutput
    } else if near(0.5 * (step - 1.0).abs()) {
        Slip::FirstCentres
    } else if near(d.round()) && d < 100.0 {
        Slip::Whole(d.round() as i32)
    } else {
        Slip::Other
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::measure::audit::field::Extent;

    fn field(at_centre: [f64; 2], gradient: [[f64; 2]; 2]) -> Field {
        let extent = Extent { middle: [49.5, 49.5], half: [50.0, 50.0] };
        Field {
            at_centre,
            gradient,
            sigma: 1e-3,
            gradient_sigma: 1e-3,
            scatter: 2e-3,
            has_gradient: true,
            extent,
        }
    }

    #[test]
    fn kinds_are_told_apart() {
        let none = [[0.0; 2]; 2];
        let double = Map::axes((0.5, -0.25), (0.5, -0.25));
        let told = |f: &Field| judge(f, &double, (100, 100), (200, 200));
        assert_eq!(told(&field([0.01, -0.005], none)).kind, Kind::None);
        let half = told(&field([0.5, 0.5], none));
        assert!(
            half.kind == Kind::Constant && half.words.contains("half an input pixel on both axes"),
            "{half:?}"
        );
        let quarter = told(&field([0.0, -0.25], none));
        assert!(quarter.words.contains("half an output pixel along columns only"), "{quarter:?}");
        assert!(told(&field([-2.0, 0.0], none)).words.contains("2 input pixels"));
        assert_eq!(told(&field([0.37, 0.1], none)).words, "a constant slip of no usual size");
        // scipy.ndimage.zoom's default: out o shows o * 99 / 199, and lies at o / 2 - 1 / 4.
        let corner = told(&field([0.0, 0.0], [[0.2513, 0.0], [0.0, 0.2513]]));
        assert!(corner.kind == Kind::Scale && corner.cause.is_some_and(|c| c.contains("corner")));
        let other = told(&field([0.0, 0.0], [[-0.6, 0.0], [0.0, -0.6]]));
        assert!(other.kind == Kind::Scale && !other.cause.is_some_and(|c| c.contains("corner")));
        // 1 degree: 50 px from the middle 0.873 px.
        let turn = told(&field([0.0, 0.0], [[0.0, -0.8727], [0.8727, 0.0]]));
        assert!(turn.kind == Kind::Turn && turn.words.contains("+1.000"), "{turn:?}");
        assert_eq!(told(&field([0.0, 0.0], [[0.0, 0.5], [0.5, 0.2]])).kind, Kind::Linear);
        let mut bent = field([0.0, 0.0], none);
        bent.scatter = 0.7;
        assert_eq!(told(&bent).kind, Kind::Irregular);
    }
}
