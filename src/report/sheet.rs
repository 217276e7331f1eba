//! The sheet: where panels, colour bars, foot and caption stand, and the drawing of them.

use super::colour::{Oklab, Rgb};
use super::display::Display;
use super::foot::{FootItem, FootKind, hatch};
use super::maps::{Group, MapOptions, ends};
use super::palette::Palette;
use super::picture::{MAX_SIDE, Picture};
use super::relief::relief;
use super::text::{Weight, cap_height, draw_text, text_width, wrap};
use super::ticks::{round_down, ticks, written};
use crate::error::{Error, Result};

/// Ink and paper.
const PAPER: Oklab = Oklab { l: 1.0, a: 0.0, b: 0.0 };
pub(super) const INK: Rgb = [0x22, 0x27, 0x2b];
const FAINT: Rgb = [0x5a, 0x62, 0x68];

/// A group with its scale settled and its place on the sheet.
struct Column<'a> {
    group: &'a Group<'a>,
    range: (f64, f64),
    /// Whether values lie beyond the two ends.
    beyond: (bool, bool),
    left: usize,
    width: usize,
}

/// The layout, in picture pixels.
pub(super) struct Sheet<'a> {
    options: &'a MapOptions,
    display: Display,
    rows: usize,
    columns: usize,
    /// Panel sides.
    panel: (usize, usize),
    groups: Vec<Column<'a>>,
    gap: usize,
    margin: usize,
    width: usize,
    /// Whether any pixel is missing.
    missing: bool,
}

impl<'a> Sheet<'a> {
    /// Settles scales and places.
    pub(super) fn new(
        groups: &'a [Group<'a>],
        display: Display,
        rows: usize,
        columns: usize,
        options: &'a MapOptions,
        count: usize,
    ) -> Result<Self> {
        let size = options.text_size;
        let (shown_rows, shown_columns) = display.shown(rows, columns);
        let panel = (shown_rows * display.repeat.0, shown_columns * display.repeat.1);
        let (margin, gap) = ((1.6 * size).round() as usize, (1.5 * size).round() as usize);
        let mut placed = Vec::new();
        let mut left = margin;
        for group in groups {
            let range = ends(group);
            let any = |test: &dyn Fn(f64) -> bool| {
                group.panels.iter().any(|p| p.values.iter().any(|v| v.is_finite() && test(*v)))
            };
            // Beyond by rounding alone is not beyond.
            let slack = 1e-9 * (range.1 - range.0);
            let beyond = (any(&|v| v < range.0 - slack), any(&|v| v > range.1 + slack));
            let titles = group.panels.iter().map(|p| text_width(&p.title, size)).fold(0.0, f64::max);
            let widest = panel.1.max(titles.ceil() as usize);
            let width = group.panels.len() * widest + (group.panels.len() - 1) * gap;
            // A bar needs room for its label and its numbers, however narrow the raster.
            let width =
                width.max(text_width(&group.scale.label, size).ceil() as usize).max((14.0 * size) as usize);
            placed.push(Column { group, range, beyond, left, width });
            left += width + gap;
        }
        let title = text_width(&options.title, 1.4 * size).ceil() as usize;
        let width = (left - gap + margin).max(title + 2 * margin);
        if width > MAX_SIDE {
            return Err(Error::usage(
                format!("{count} panels side by side would be {width} pixels wide"),
                format!(
                    "draw fewer panels or smaller ones; a picture has at most {MAX_SIDE} pixels on a side"
                ),
            ));
        }
        let missing = groups.iter().any(|g| g.panels.iter().any(|p| p.values.iter().any(|v| !v.is_finite())));
        Ok(Sheet { options, display, rows, columns, panel, groups: placed, gap, margin, width, missing })
    }

    /// Draws everything.
    pub(super) fn draw(&self) -> Result<Picture> {
        let size = self.options.text_size;
        let line = (1.45 * size).round() as usize;
        let cap = cap_height(size).round() as usize;
        let mut top = self.margin;
        let title_base = top + cap_height(1.4 * size).round() as usize;
        if !self.options.title.is_empty() {
            top = title_base + (1.2 * size) as usize;
        }
        let head_base = top + cap;
        let has_heads = self.groups.iter().any(|g| g.group.panels.iter().any(|p| !p.title.is_empty()));
        if has_heads {
            top = head_base + (0.65 * size) as usize;
        }
        let panel_top = top;
        let bar_top = panel_top + self.panel.0 + (1.1 * size) as usize;
        let bar_height = cap + (0.55 * size) as usize + (0.85 * size) as usize + cap + (0.6 * size) as usize;
        let foot_top = bar_top + bar_height + (1.1 * size) as usize;

        // The relief comes first: the caption says how far it is exaggerated.
        let (shown_rows, shown_columns) = self.display.shown(self.rows, self.columns);
        let pixel = self.options.pixel.unwrap_or((1.0, 1.0));
        let shown_pixel = (pixel.0 * self.display.block.0 as f64, pixel.1 * self.display.block.1 as f64);
        let reliefs: Vec<Vec<_>> = self
            .groups
            .iter()
            .map(|g| {
                let shade = |surface: &[f64]| {
                    let shown = self.display.reduce(surface, self.rows, self.columns);
                    relief(&shown, shown_rows, shown_columns, shown_pixel)
                };
                g.group.panels.iter().map(|p| p.surface.map(shade)).collect()
            })
            .collect();
        let caption = self.caption(reliefs.iter().flatten().flatten().map(|r| r.exaggeration).collect());
        let lines = wrap(&caption, 0.87 * size, (self.width - 2 * self.margin) as f64);

        let foot = self.foot(foot_top);
        let foot_lines = foot.iter().map(|item| item.line).max().map_or(0, |n| n + 1);
        let caption_top =
            foot_top + foot_lines * (2 * line) + if lines.is_empty() { 0 } else { size as usize / 3 };
        let height = caption_top + lines.len() * (1.3 * size).round() as usize + self.margin - line / 4;
        let mut picture = Picture::new(self.width, height, PAPER)?;

        let margin = self.margin as f64;
        draw_text(
            &mut picture,
            (margin, title_base as f64),
            &self.options.title,
            1.4 * size,
            Weight::Bold,
            INK,
        );
        for (column, reliefs) in self.groups.iter().zip(&reliefs) {
            let count = column.group.panels.len();
            let step = (column.width + self.gap) / count;
            for (i, (panel, relief)) in column.group.panels.iter().zip(reliefs).enumerate() {
                let left = column.left + i * step;
                draw_text(
                    &mut picture,
                    (left as f64, head_base as f64),
                    &panel.title,
                    size,
                    Weight::Regular,
                    INK,
                );
                let shade = relief.as_ref().map(|r| r.shade.as_slice());
                self.paint(&mut picture, panel.values, shade, column, (left, panel_top));
                picture.frame(left, panel_top, self.panel.1, self.panel.0, INK);
            }
            self.bar(&mut picture, column, bar_top);
        }
        for item in &foot {
            item.draw(&mut picture, self.options);
        }
        for (i, text) in lines.iter().enumerate() {
            let base = caption_top as f64 + cap as f64 + i as f64 * (1.3 * size).round();
            draw_text(&mut picture, (margin, base), text, 0.87 * size, Weight::Regular, FAINT);
        }
        Ok(picture)
    }

    /// The caption and what must be said of the drawing.
    fn caption(&self, mut exaggerations: Vec<f64>) -> String {
        exaggerations.sort_by(f64::total_cmp);
        exaggerations.dedup();
        let times: Vec<String> =
            exaggerations.iter().map(|e| written(*e, (-e.log10()).ceil().clamp(0.0, 6.0) as usize)).collect();
        let relief = (!times.is_empty()).then(|| {
            format!("relief is lit from the upper left, slopes exaggerated {} times", times.join(" and "))
        });
        let notes: Vec<String> = self.display.note().into_iter().chain(relief).collect();
        let mut notes = notes.join("; ");
        if let Some(first) = notes.get(..1).map(str::to_uppercase) {
            notes.replace_range(..1, &first);
            notes.push('.');
        }
        [self.options.caption.trim(), &notes]
            .iter()
            .filter(|s| !s.is_empty())
            .copied()
            .collect::<Vec<_>>()
            .join(" ")
    }

    /// Fills one panel.
    fn paint(
        &self,
        picture: &mut Picture,
        values: &[f64],
        shade: Option<&[f64]>,
        column: &Column<'_>,
        (left, top): (usize, usize),
    ) {
        let shown = self.display.reduce(values, self.rows, self.columns);
        let (_, shown_columns) = self.display.shown(self.rows, self.columns);
        let (low, high) = column.range;
        let palette = column.group.scale.palette;
        // On differences lightness tells the size, so there the relief is only hinted at.
        let strength = if palette == Palette::Diverging { 0.30 } else { 0.55 };
        let (tall, wide) = self.display.repeat;
        for (i, value) in shown.iter().enumerate() {
            let (row, across) = (top + i / shown_columns * tall, left + i % shown_columns * wide);
            if !value.is_finite() {
                hatch(picture, across, row, wide, tall, (left, top));
                continue;
            }
            let mut colour = palette.at((value - low) / (high - low));
            if let Some(shade) = shade {
                colour = lit(colour, strength * shade[i]);
            }
            picture.fill(across, row, wide, tall, colour.to_rgb());
        }
    }

    /// The colour bar of a group: label, bar, ticks, numbers.
    fn bar(&self, picture: &mut Picture, column: &Column<'_>, top: usize) {
        let size = self.options.text_size;
        let cap = cap_height(size).round() as usize;
        let label = &column.group.scale.label;
        draw_text(picture, (column.left as f64, (top + cap) as f64), label, size, Weight::Regular, INK);
        let height = (0.85 * size).round() as usize;
        let point = height;
        // Room for the points; numbers at the ends may stand over the gap beside the bar.
        let inset = if column.beyond.0 || column.beyond.1 { point } else { 0 };
        let left = column.left + inset;
        let width = column.width.min((34.0 * size) as usize).saturating_sub(2 * inset).max(2);
        let bar_top = top + cap + (0.55 * size).round() as usize;
        let (low, high) = column.range;
        let palette = column.group.scale.palette;
        for x in 0..width {
            let colour = palette.at((x as f64 + 0.5) / width as f64).to_rgb();
            picture.fill(left + x, bar_top, 1, height, colour);
        }
        // The outline, with a point where values go on beyond the end.
        let (l, r) = (left as f64 - 0.5, (left + width) as f64 + 0.5);
        let (t, b) = (bar_top as f64 - 0.5, (bar_top + height) as f64 + 0.5);
        let middle = 0.5 * (t + b);
        let mut outline = vec![(l, t), (r, t)];
        if column.beyond.1 {
            let tip = (r + point as f64 * 0.8, middle);
            picture.polygon(&[(r - 0.5, t), tip, (r - 0.5, b)], palette.at(1.0).to_rgb());
            outline.push(tip);
        }
        outline.extend([(r, b), (l, b)]);
        if column.beyond.0 {
            let tip = (l - point as f64 * 0.8, middle);
            picture.polygon(&[(l + 0.5, t), tip, (l + 0.5, b)], palette.at(0.0).to_rgb());
            outline.push(tip);
        }
        outline.push((l, t));
        picture.stroke(&[outline], 1.0, INK);
        // As many numbers as fit with a space between them.
        let mut count = 9;
        let (at, decimals) = loop {
            let (at, decimals) = ticks(low, high, count);
            let widest = at.iter().map(|v| text_width(&written(*v, decimals), size)).fold(0.0, f64::max);
            let room = width as f64 / (at.len().max(2) - 1) as f64;
            if count <= 1 || widest + 0.9 * size <= room {
                break (at, decimals);
            }
            count -= 1;
        };
        for v in at {
            let x = left as f64 + ((v - low) / (high - low) * width as f64).round() + 0.5;
            let x = x.min((left + width) as f64 + 0.5);
            picture.stroke(&[vec![(x, b + 0.5), (x, b + 0.3 * size)]], 1.0, INK);
            let text = written(v, decimals);
            // The number itself is centred; its sign hangs to the left.
            let digits = text.trim_start_matches('−');
            let start =
                x - 0.5 * text_width(digits, size) - (text_width(&text, size) - text_width(digits, size));
            let base = b + 0.65 * size + cap as f64;
            draw_text(picture, (start, base), &text, size, Weight::Regular, INK);
        }
    }

    /// The entries at the foot, set out in lines.
    fn foot(&self, top: usize) -> Vec<FootItem> {
        let size = self.options.text_size;
        let mut items = Vec::new();
        if let Some((_, width)) = self.options.pixel {
            let per_pixel = width * self.display.block.1 as f64 / self.display.repeat.1 as f64;
            let wanted = (self.panel.1 as f64 * 0.4).clamp(4.0 * size, 15.0 * size);
            let length = round_down(wanted * per_pixel);
            let decimals = (-length.log10() - 1e-9).ceil().clamp(0.0, 6.0) as usize;
            let text = format!("{} {}", written(length, decimals), self.options.unit).trim_end().to_owned();
            items.push(FootKind::ScaleBar { pixels: length / per_pixel, text });
        }
        if let Some(north) = self.options.north {
            items.push(FootKind::North(north));
        }
        if self.missing {
            items.push(FootKind::Missing);
        }
        let space = 2.2 * size;
        let (mut left, mut line) = (self.margin as f64, 0);
        let mut placed = Vec::new();
        for kind in items {
            let width = kind.width(size);
            if left > self.margin as f64 && left + width > (self.width - self.margin) as f64 {
                (left, line) = (self.margin as f64, line + 1);
            }
            let base = (top + line * 2 * (1.45 * size).round() as usize) as f64 + 1.6 * size;
            placed.push(FootItem { kind, left: left.round(), base: base.round(), line });
            left += width + space;
        }
        placed
    }
}

/// A colour under light: -1 is dark, 1 bright; hue and chroma stay as far as the screen allows.
fn lit(colour: Oklab, light: f64) -> Oklab {
    let l = if light < 0.0 { colour.l * (1.0 + light) } else { colour.l + (1.0 - colour.l) * light };
    Oklab { l, ..colour }
}
