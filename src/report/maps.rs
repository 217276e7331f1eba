//! Raster maps as pictures: panels side by side, with shaded relief, colour bars, a scale bar and an entry for missing
//! pixels. (A map in the everyday sense; what moves content is [`crate::map`].)

use super::display::Display;
use super::palette::Palette;
use super::picture::Picture;
use super::sheet::Sheet;
use super::ticks::round_up;
use crate::error::{Error, Result};
use crate::grid::Grid;

/// What a colour stands for.
#[derive(Clone, Debug)]
pub struct Scale {
    /// The palette.
    pub palette: Palette,
    /// What the values are, with their unit: `change in elevation (m)`.
    pub label: String,
    /// Values at the two ends; `None` takes them from the data: nearly all of it (0.2 to 99.8 %), rounded outwards,
    /// and for [`Palette::Diverging`] the same on both sides of 0. Values beyond are drawn in the end colours, and the
    /// bar gets a point at that end.
    pub range: Option<(f64, f64)>,
}

/// One raster to be drawn.
#[derive(Clone, Debug)]
pub struct Panel<'a> {
    /// Its title.
    pub title: String,
    /// Rows x columns of values; what is not finite is missing.
    pub values: &'a [f64],
    /// A surface to be shaded under the colours, in the unit of the pixel size; not finite: missing.
    pub surface: Option<&'a [f64]>,
}

/// Panels that share one scale and so one colour bar.
#[derive(Clone, Debug)]
pub struct Group<'a> {
    /// The scale.
    pub scale: Scale,
    /// The panels, from left to right.
    pub panels: Vec<Panel<'a>>,
}

/// What the whole sheet carries.
#[derive(Clone, Debug)]
pub struct MapOptions {
    /// Title of the sheet; may be empty.
    pub title: String,
    /// A text under the maps; how the pixels are drawn and how relief is exaggerated is added to it.
    pub caption: String,
    /// Height and width of a pixel in the world; `None`: no scale bar, square pixels.
    pub pixel: Option<(f64, f64)>,
    /// Unit of the pixel size: `m`, `µm`.
    pub unit: String,
    /// Where north lies, in degrees clockwise from straight up; `None`: no arrow.
    pub north: Option<f64>,
    /// Longest side of a panel in picture pixels, 16 to 4096.
    pub panel_side: usize,
    /// Size of the lettering in pixels, 8 to 64.
    pub text_size: f64,
}

impl Default for MapOptions {
    fn default() -> Self {
        MapOptions {
            title: String::new(),
            caption: String::new(),
            pixel: None,
            unit: String::new(),
            north: None,
            panel_side: 640,
            text_size: 15.0,
        }
    }
}

impl MapOptions {
    /// Takes pixel size and north (the direction of growing y) from a grid's place in the world; `unit` is that of
    /// its coordinates. A grid without a place changes nothing.
    pub fn place(mut self, grid: &Grid, unit: &str) -> Self {
        let Some([[a, b, _], [d, e, _]]) = grid.world else { return self };
        let (height, width) = (b.hypot(e), a.hypot(d));
        let area = a * e - b * d;
        if height > 0.0 && width > 0.0 && area.abs() > 1e-12 * height * width {
            self.pixel = Some((height, width));
            self.unit = unit.to_owned();
            // Where (x, y) = (0, 1) goes, in columns and rows, and from there on the sheet.
            let (right, down) = (-b / area * width, a / area * height);
            self.north = Some(right.atan2(-down).to_degrees());
        }
        self
    }
}

/// Draws one raster. See [`draw_maps`].
///
/// # Errors
/// As for [`draw_maps`].
pub fn draw_map(
    panel: Panel<'_>,
    scale: Scale,
    rows: usize,
    columns: usize,
    options: &MapOptions,
) -> Result<Picture> {
    draw_maps(&[Group { scale, panels: vec![panel] }], rows, columns, options)
}

/// Draws rasters of one grid side by side, each group over its own colour bar.
///
/// # Errors
/// When there is nothing to draw, a raster is not `rows * columns` long, a range is empty or not finite, or the sheet
/// would be wider than a picture may be.
pub fn draw_maps(groups: &[Group<'_>], rows: usize, columns: usize, options: &MapOptions) -> Result<Picture> {
    let count = check(groups, rows, columns, options)?;
    let display = Display::fit(rows, columns, options.pixel.unwrap_or((1.0, 1.0)), options.panel_side);
    let sheet = Sheet::new(groups, display, rows, columns, options, count)?;
    sheet.draw()
}

/// Refuses what cannot be drawn; returns the number of panels.
fn check(groups: &[Group<'_>], rows: usize, columns: usize, options: &MapOptions) -> Result<usize> {
    let bad = |problem: String, mend: &str| Err(Error::usage(problem, mend));
    let count: usize = groups.iter().map(|g| g.panels.len()).sum();
    let pixels = rows.checked_mul(columns).unwrap_or(0);
    if count == 0 || pixels == 0 || groups.iter().any(|g| g.panels.is_empty()) {
        return bad(
            format!("nothing to draw: {count} panels of {rows} x {columns} pixels"),
            "give each group a panel with at least one pixel",
        );
    }
    if !(8.0..=64.0).contains(&options.text_size) || !(16..=4096).contains(&options.panel_side) {
        return bad(
            format!("lettering of {} and panels of {} pixels", options.text_size, options.panel_side),
            "lettering must be 8 to 64 pixels, panels 16 to 4096",
        );
    }
    if options.pixel.is_some_and(|(h, w)| !(h.is_finite() && w.is_finite() && h > 0.0 && w > 0.0)) {
        return bad("the pixel size must be above 0".into(), "give height and width of a pixel");
    }
    for group in groups {
        if let Some((low, high)) = group.scale.range
            && !(low.is_finite() && high.is_finite() && low < high)
        {
            return bad(
                format!("colours cannot run from {low} to {high}"),
                "give a lower and a higher number",
            );
        }
        for panel in &group.panels {
            for (what, values) in [("values", Some(panel.values)), ("surface", panel.surface)] {
                if let Some(values) = values.filter(|v| v.len() != pixels) {
                    return bad(
                        format!("{}: {} {what} for {rows} x {columns} pixels", panel.title, values.len()),
                        "all panels of a sheet lie on one grid",
                    );
                }
            }
        }
    }
    Ok(count)
}

/// The two ends of a scale.
pub(super) fn ends(group: &Group<'_>) -> (f64, f64) {
    if let Some(range) = group.scale.range {
        return range;
    }
    // Of a very large raster every so many-th sample is enough to find the ends.
    let stride = group.panels.iter().map(|p| p.values.len()).sum::<usize>() / 4_000_000 + 1;
    let mut values: Vec<f64> = group
        .panels
        .iter()
        .flat_map(|p| p.values.iter().step_by(stride).copied())
        .filter(|v| v.is_finite())
        .collect();
    if values.is_empty() {
        return if group.scale.palette == Palette::Diverging { (-1.0, 1.0) } else { (0.0, 1.0) };
    }
    let mut share = |s: f64| {
        let rank = ((values.len() - 1) as f64 * s).round() as usize;
        *values.select_nth_unstable_by(rank, f64::total_cmp).1
    };
    let (low, high) = (share(0.002), share(0.998));
    match group.scale.palette {
        Palette::Diverging => {
            let most = low.abs().max(high.abs());
            let step = round_up(most.max(f64::MIN_POSITIVE) / 10.0);
            let end = if most > 0.0 { (most / step - 1e-9).ceil() * step } else { 1.0 };
            (-end, end)
        }
        Palette::Sequential => {
            // One value everywhere still gets a bar with a middle.
            let spread = (high - low).max(1e-6 * high.abs().max(low.abs())).max(1e-12);
            let step = round_up(spread / 10.0);
            let (first, last) = ((low / step + 1e-9).floor() * step, (high / step - 1e-9).ceil() * step);
            if first < last { (first, last) } else { (low - spread, high + spread) }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::report::palette::MISSING_GROUND;

    fn panel<'a>(title: &str, values: &'a [f64]) -> Panel<'a> {
        Panel { title: title.into(), values, surface: None }
    }

    fn scale(palette: Palette, range: Option<(f64, f64)>) -> Scale {
        Scale { palette, label: "value (m)".into(), range }
    }

    fn at(picture: &Picture, column: usize, row: usize) -> [u8; 3] {
        let i = (row * picture.width + column) * 3;
        [picture.rgb[i], picture.rgb[i + 1], picture.rgb[i + 2]]
    }

    /// The first pixel of the given colour, by rows: (column, row).
    fn find(picture: &Picture, colour: [u8; 3]) -> Option<(usize, usize)> {
        let i = picture.rgb.chunks_exact(3).position(|p| p == colour)?;
        Some((i % picture.width, i / picture.width))
    }

    #[test]
    fn pixels_stand_in_their_places_with_their_colours() {
        let values = [-1.0, -0.5, 0.25, 0.5, f64::NAN, 1.0, 7.0, 0.0, -0.25, 0.1, 0.2, 0.3];
        let options = MapOptions { panel_side: 64, ..MapOptions::default() };
        let scale = scale(Palette::Diverging, Some((-1.0, 1.0)));
        let picture = draw_map(panel("", &values), scale, 3, 4, &options).unwrap();
        // 16 x 16 for each; the first is the darkest of the lower arm and stands at the upper left.
        let (left, top) = find(&picture, Palette::Diverging.at(0.0).to_rgb()).unwrap();
        for (i, v) in values.iter().enumerate().filter(|(_, v)| !v.is_nan()) {
            let wanted = Palette::Diverging.at((v + 1.0) / 2.0).to_rgb();
            for (dc, dr) in [(0, 0), (15, 0), (0, 15), (15, 15)] {
                assert_eq!(at(&picture, left + i % 4 * 16 + dc, top + i / 4 * 16 + dr), wanted, "{v}");
            }
        }
        let gap: Vec<_> = (0..256).map(|i| at(&picture, left + i % 16, top + 16 + i / 16)).collect();
        let ground = MISSING_GROUND.to_rgb();
        assert!(gap.contains(&ground) && gap.iter().any(|p| p[0] < ground[0] - 20));
        assert!(gap.iter().all(|p| p[0] == p[1] && p[1] == p[2]), "grey only");
    }

    #[test]
    fn panels_of_a_group_share_their_scale() {
        let (small, large) = ([0.1, -0.1, 0.1, 0.1, 0.0, 0.1], [0.8, -0.2, 0.3, 0.0, 0.1, 0.2]);
        let scale = scale(Palette::Diverging, None);
        let group = Group { scale: scale.clone(), panels: vec![panel("a", &small), panel("b", &large)] };
        assert_eq!(ends(&group), (-0.8, 0.8));
        let alone = Group { scale, panels: vec![panel("a", &small)] };
        assert!((ends(&alone).1 - 0.1).abs() < 1e-12);
        let two = draw_maps(std::slice::from_ref(&group), 2, 3, &MapOptions::default()).unwrap();
        let three = draw_maps(&[group, alone], 2, 3, &MapOptions::default()).unwrap();
        assert!(three.width > two.width && two.width > 2 * 639);
    }

    #[test]
    fn ranges_of_every_kind_of_raster() {
        let range = |palette, values: &[f64]| {
            ends(&Group { scale: scale(palette, None), panels: vec![panel("", values)] })
        };
        assert_eq!(range(Palette::Sequential, &[11.74, 13.1, 15.96]), (11.5, 16.0));
        assert_eq!(range(Palette::Diverging, &[0.0, 0.0]), (-1.0, 1.0));
        assert_eq!(range(Palette::Sequential, &[f64::NAN]), (0.0, 1.0));
        let (low, high) = range(Palette::Sequential, &[431.5, 431.5]);
        assert!(low < 431.5 && high > 431.5);
        // One wild sample in a thousand does not flatten the rest.
        let mut many: Vec<f64> = (0..2000).map(|i| f64::from(i) / 2000.0).collect();
        many[77] = 1e9;
        assert_eq!(range(Palette::Sequential, &many), (0.0, 1.0));
    }

    #[test]
    fn odd_rasters_are_drawn_all_the_same() {
        let options = MapOptions { pixel: Some((3e-7, 2e-7)), north: Some(-170.0), ..MapOptions::default() };
        for values in [[f64::NAN], [f64::INFINITY], [1e300], [-5e-324], [0.0]] {
            for palette in [Palette::Sequential, Palette::Diverging] {
                let surface = Panel { surface: Some(&values), ..panel("one pixel", &values) };
                draw_map(surface, scale(palette, None), 1, 1, &options).unwrap();
            }
        }
        let wild = [f64::MAX, f64::MIN, 0.0];
        draw_map(panel("", &wild), scale(Palette::Sequential, None), 1, 3, &options).unwrap();
        let long = vec![0.5; 9000];
        let picture = draw_map(panel("", &long), scale(Palette::Diverging, None), 1, 9000, &options).unwrap();
        assert!(picture.width < 720);
    }

    #[test]
    fn wrong_calls_are_usage_errors() {
        let values = [0.0; 6];
        let good = MapOptions::default();
        let draw = |rows, columns, range, options: &MapOptions| {
            draw_map(panel("a", &values), scale(Palette::Diverging, range), rows, columns, options)
        };
        assert!(draw(2, 3, None, &good).is_ok());
        for result in [
            draw(2, 4, None, &good),
            draw(0, 3, None, &good),
            draw(usize::MAX, 3, None, &good),
            draw(2, 3, Some((1.0, 1.0)), &good),
            draw(2, 3, Some((0.0, f64::NAN)), &good),
            draw(2, 3, None, &MapOptions { text_size: f64::NAN, ..good.clone() }),
            draw(2, 3, None, &MapOptions { panel_side: 5000, ..good.clone() }),
            draw(2, 3, None, &MapOptions { pixel: Some((0.0, 1.0)), ..good.clone() }),
            draw_maps(&[], 2, 3, &good),
        ] {
            assert_eq!(result.unwrap_err().exit_code(), 2);
        }
        let many = vec![panel("a", &values); 40];
        let group = Group { scale: scale(Palette::Diverging, None), panels: many };
        assert!(draw_maps(&[group], 2, 3, &good).is_err());
    }

    #[test]
    fn place_tells_pixel_size_and_north() {
        // Columns point 30 degrees north of east, so north lies 30 degrees clockwise of the sheet's top.
        let (sin, cos) = 30f64.to_radians().sin_cos();
        let world = Some([[2.0 * cos, 3.0 * sin, 7.0], [2.0 * sin, -3.0 * cos, 9.0]]);
        let grid = Grid { rows: 4, columns: 5, world, sample: Default::default(), unit: None, crs: None };
        let options = MapOptions::default().place(&grid, "m");
        let (height, width) = options.pixel.unwrap();
        assert!((height - 3.0).abs() < 1e-12 && (width - 2.0).abs() < 1e-12);
        assert!((options.north.unwrap() - 30.0).abs() < 1e-9);
        let none = MapOptions::default().place(&Grid { world: None, ..grid }, "m");
        assert!(none.pixel.is_none() && none.north.is_none());
    }

    #[test]
    fn the_scale_bar_has_its_length() {
        // 3 picture pixels for 2 m: the round length below 0.4 of 600 pixels or 225 pixels is 100 m, 150 pixels.
        let values = vec![0.0; 200 * 100];
        let options = MapOptions {
            pixel: Some((2.0, 2.0)),
            unit: "m".into(),
            panel_side: 600,
            caption: "c".into(),
            ..MapOptions::default()
        };
        let picture =
            draw_map(panel("", &values), scale(Palette::Sequential, None), 100, 200, &options).unwrap();
        let ink = [0x22, 0x27, 0x2b];
        // Longest run of ink in a row below the panel's frame that starts at the margin, the bar's line.
        let run = |row: usize| (24..picture.width).take_while(|c| at(&picture, *c, row) == ink).count();
        let longest = (380..picture.height).map(run).max().unwrap();
        assert!((149..=153).contains(&longest), "{longest}");
    }
}
