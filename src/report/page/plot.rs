//! Plots in SVG, coloured by the page's style so that they follow light and dark.

use super::escape;
use crate::report::palette::Palette;
use crate::report::ticks::{ticks, written};

const WIDTH: f64 = 560.0;
const HEIGHT: f64 = 300.0;
/// Space left, right, above and below the axes.
const EDGE: [f64; 4] = [58.0, 14.0, 30.0, 46.0];

/// One line.
pub struct Series {
    /// Its name.
    pub name: String,
    /// (x, y); a NaN breaks the line.
    pub points: Vec<(f64, f64)>,
}

/// A line plot.
pub struct Lines {
    /// What it shows, also for those who cannot see it.
    pub title: String,
    /// Name and range of the horizontal axis.
    pub x: (String, f64, f64),
    /// Name and range of the vertical axis.
    pub y: (String, f64, f64),
    /// Up to three lines.
    pub series: Vec<Series>,
    /// Upright marks with their names.
    pub marks: Vec<(f64, String)>,
}

struct Frame {
    x: (f64, f64),
    y: (f64, f64),
}

impl Frame {
    fn at(&self, x: f64, y: f64) -> (f64, f64) {
        let across = (x - self.x.0) / (self.x.1 - self.x.0);
        let up = (y - self.y.0) / (self.y.1 - self.y.0);
        (EDGE[0] + across * (WIDTH - EDGE[0] - EDGE[1]), HEIGHT - EDGE[3] - up * (HEIGHT - EDGE[2] - EDGE[3]))
    }

    fn axes(&self, x: &str, y: &str) -> String {
        let mut out = String::new();
        let (xs, decimals) = ticks(self.x.0, self.x.1, 6);
        for t in xs {
            let (px, bottom) = self.at(t, self.y.0);
            let (_, top) = self.at(t, self.y.1);
            out += &format!("<path class=\"grid\" d=\"M{px:.1} {top:.1}V{bottom:.1}\"/>");
            out += &format!(
                "<text x=\"{px:.1}\" y=\"{:.1}\" text-anchor=\"middle\">{}</text>",
                bottom + 17.0,
                written(t, decimals)
            );
        }
        let (ys, decimals) = ticks(self.y.0, self.y.1, 5);
        for t in ys {
            let (left, py) = self.at(self.x.0, t);
            let (right, _) = self.at(self.x.1, t);
            out += &format!("<path class=\"grid\" d=\"M{left:.1} {py:.1}H{right:.1}\"/>");
            out += &format!(
                "<text x=\"{:.1}\" y=\"{:.1}\" text-anchor=\"end\">{}</text>",
                left - 7.0,
                py + 4.0,
                written(t, decimals)
            );
        }
        let ((left, bottom), (right, top)) = (self.at(self.x.0, self.y.0), self.at(self.x.1, self.y.1));
        out += &format!("<path class=\"axis\" d=\"M{left:.1} {top:.1}V{bottom:.1}H{right:.1}\"/>");
        out += &format!(
            "<text x=\"{:.1}\" y=\"{:.1}\" text-anchor=\"middle\">{}</text>",
            0.5 * (left + right),
            HEIGHT - 8.0,
            escape(x)
        );
        out += &format!("<text x=\"4\" y=\"14\">{}</text>", escape(y));
        out
    }
}

fn svg(title: &str, height: f64, body: &str) -> String {
    format!(
        "<svg class=\"plot\" viewBox=\"0 0 {WIDTH} {height:.0}\" role=\"img\" aria-label=\"{0}\"><title>{0}</title>{body}</svg>\n",
        escape(title)
    )
}

/// Draws lines.
pub fn lines(plot: &Lines) -> String {
    let frame = Frame { x: (plot.x.1, plot.x.2), y: (plot.y.1, plot.y.2) };
    let mut body = frame.axes(&plot.x.0, &plot.y.0);
    for (x, name) in plot.marks.iter().filter(|m| (plot.x.1..=plot.x.2).contains(&m.0)) {
        let ((px, top), (_, bottom)) = (frame.at(*x, plot.y.2), frame.at(*x, plot.y.1));
        body += &format!("<path class=\"mark\" d=\"M{px:.1} {top:.1}V{bottom:.1}\"/>");
        let (anchor, dx) = if px > 0.6 * WIDTH { ("end", -5.0) } else { ("start", 5.0) };
        body += &format!(
            "<text x=\"{:.1}\" y=\"{:.1}\" text-anchor=\"{anchor}\">{}</text>",
            px + dx,
            bottom - 6.0,
            escape(name)
        );
    }
    let mut at = WIDTH - EDGE[1];
    for (i, s) in plot.series.iter().enumerate().rev() {
        let mut path = String::new();
        let mut pen = 'M';
        for (x, y) in &s.points {
            if !y.is_finite() || !(plot.x.1..=plot.x.2).contains(x) {
                pen = 'M';
                continue;
            }
            let (px, py) = frame.at(*x, y.clamp(plot.y.1, plot.y.2));
            path += &format!("{pen}{px:.1} {py:.1}");
            pen = 'L';
        }
        body += &format!("<path class=\"series s{}\" d=\"{path}\"/>", i + 1);
        // The legend runs from the right, above the plot.
        let length = 8.0 * s.name.chars().count() as f64;
        body += &format!(
            "<text class=\"title\" x=\"{at:.1}\" y=\"14\" text-anchor=\"end\">{}</text>",
            escape(&s.name)
        );
        at -= length + 8.0;
        body += &format!("<path class=\"series s{}\" d=\"M{:.1} 10H{:.1}\"/>", i + 1, at - 22.0, at);
        at -= 38.0;
    }
    svg(&plot.title, HEIGHT, &body)
}

/// Bars in groups of up to two.
pub struct Bars {
    /// What they show.
    pub title: String,
    /// Name of the horizontal axis, its left and right end.
    pub x: (String, f64, f64),
    /// Name of the vertical axis.
    pub y: String,
    /// Names and heights.
    pub groups: Vec<(String, Vec<f64>)>,
}

/// Draws bars.
pub fn bars(plot: &Bars) -> String {
    let most = plot.groups.iter().flat_map(|g| g.1.iter().copied()).fold(0.0, f64::max);
    let frame = Frame { x: (plot.x.1, plot.x.2), y: (0.0, if most > 0.0 { 1.08 * most } else { 1.0 }) };
    let mut body = frame.axes(&plot.x.0, &plot.y);
    let mut at = WIDTH - EDGE[1];
    for (g, (name, heights)) in plot.groups.iter().enumerate().rev() {
        let step = (plot.x.2 - plot.x.1) / heights.len().max(1) as f64;
        let wide = step / plot.groups.len() as f64;
        for (i, h) in heights.iter().enumerate() {
            let (left, top) = frame.at(plot.x.1 + step * i as f64 + wide * g as f64, *h);
            let (right, bottom) = frame.at(plot.x.1 + step * i as f64 + wide * (g as f64 + 0.86), 0.0);
            body += &format!(
                "<rect class=\"s{}\" x=\"{left:.1}\" y=\"{top:.1}\" width=\"{:.1}\" height=\"{:.1}\"/>",
                g + 1,
                right - left,
                bottom - top
            );
        }
        let length = 8.0 * name.chars().count() as f64;
        body += &format!(
            "<text class=\"title\" x=\"{at:.1}\" y=\"14\" text-anchor=\"end\">{}</text>",
            escape(name)
        );
        at -= length + 8.0;
        body += &format!(
            "<rect class=\"s{}\" x=\"{:.1}\" y=\"5\" width=\"16\" height=\"10\"/>",
            g + 1,
            at - 16.0
        );
        at -= 34.0;
    }
    svg(&plot.title, HEIGHT, &body)
}

/// Cells of a coarse grid, row by row, painted about zero up to `most`; `text` tells a cell's value.
pub fn heat(
    title: &str,
    (rows, columns): (usize, usize),
    values: &[Option<f64>],
    most: f64,
    text: impl Fn(f64) -> String,
) -> String {
    let side = (WIDTH / columns.max(1) as f64).min(380.0 / rows.max(1) as f64);
    let mut body = String::new();
    for (i, v) in values.iter().enumerate() {
        let (x, y) = ((i % columns.max(1)) as f64 * side, (i / columns.max(1)) as f64 * side);
        let cell =
            format!("class=\"cell\" x=\"{x:.1}\" y=\"{y:.1}\" width=\"{side:.1}\" height=\"{side:.1}\"");
        body += &match v {
            Some(v) => {
                let [r, g, b] = Palette::Diverging.at(0.5 + 0.5 * v / most).to_rgb();
                format!(
                    "<rect {cell} fill=\"#{r:02x}{g:02x}{b:02x}\"><title>{}</title></rect>",
                    escape(&text(*v))
                )
            }
            None => format!("<rect {cell} fill=\"#b9b9b9\"><title>nothing to compare</title></rect>"),
        };
    }
    svg(title, side * rows as f64, &body)
}

/// An arrow of a field: where it begins (row, column) and how far it goes (rows, columns), in pixels; `None` for no vote.
pub struct Arrow {
    /// Row and column.
    pub at: [f64; 2],
    /// Rows and columns.
    pub by: Option<[f64; 2]>,
}

/// A field of arrows over a frame of `size` (rows, columns), lengthened by `factor`.
pub fn arrows(title: &str, size: (f64, f64), all: &[Arrow], factor: f64) -> String {
    let unit = (WIDTH / size.1.max(1.0)).min(380.0 / size.0.max(1.0));
    let mut body = format!(
        "<rect class=\"axis\" x=\"0.5\" y=\"0.5\" width=\"{:.1}\" height=\"{:.1}\"/>",
        size.1 * unit - 1.0,
        size.0 * unit - 1.0
    );
    for a in all {
        let (x, y) = (a.at[1] * unit, a.at[0] * unit);
        let Some(by) = a.by else {
            body += &format!("<circle class=\"dot\" cx=\"{x:.1}\" cy=\"{y:.1}\" r=\"1.2\"/>");
            continue;
        };
        let (dx, dy) = (by[1] * factor * unit, by[0] * factor * unit);
        let length = dx.hypot(dy).max(1e-9);
        // The head: two strokes back from the tip.
        let (ux, uy) = (dx / length * 6.0f64.min(length), dy / length * 6.0f64.min(length));
        let (tx, ty) = (x + dx, y + dy);
        body += &format!(
            "<path class=\"arrow\" d=\"M{x:.1} {y:.1}L{tx:.1} {ty:.1}M{:.1} {:.1}L{tx:.1} {ty:.1}L{:.1} {:.1}\"/>",
            tx - ux + 0.5 * uy,
            ty - uy - 0.5 * ux,
            tx - ux - 0.5 * uy,
            ty - uy + 0.5 * ux
        );
    }
    svg(title, size.0 * unit, &body)
}
