//! What commissioning found, as one HTML file that needs nothing else, and prints well.

use std::fmt::Write as _;

use super::document::{ChannelQuality, STYLE, escaped, quality};
use crate::alarm::{NOTICE, minute};
use crate::record::Stamp;

/// A table: heads, and rows of as many cells. Cells of columns that `numbers` names stand to the right.
#[derive(Debug, Clone, Default)]
pub struct Sheet {
    /// Heads of the columns.
    pub heads: Vec<String>,
    /// Columns with numbers, by order.
    pub numbers: Vec<usize>,
    /// Rows.
    pub rows: Vec<Vec<String>>,
}

/// All that the page tells. Text is plain: the page escapes it; plots are SVG.
#[derive(Debug, Clone, Default)]
pub struct CalibrationReport {
    /// The site's name for people.
    pub site: String,
    /// When it was made.
    pub made: Stamp,
    /// First instant used and the first after.
    pub span: (Stamp, Stamp),
    /// Number of blocks.
    pub blocks: usize,
    /// What a reader must look at first; empty where all is well.
    pub warnings: Vec<String>,
    /// Figures with their intervals.
    pub figures: Sheet,
    /// What history could tell, a sentence each.
    pub told: Vec<String>,
    /// Grounds compared by evidence; empty where none were.
    pub grounds: Sheet,
    /// What is to be said of the comparison.
    pub choice: String,
    /// Plan of the site, as SVG.
    pub plan: String,
    /// Noise and what is left, by gauge.
    pub gauges: Sheet,
    /// A plot of every gauge, as SVG.
    pub plots: Vec<String>,
    /// Log-log plots of rate changes, each with what is to be said of it.
    pub changes: Vec<(String, String)>,
    /// Why there is no log-log plot, where there is none.
    pub no_changes: String,
    /// Channels over the history.
    pub channels: Vec<ChannelQuality>,
    /// Mesh, reduction and spread, a sentence each.
    pub numerics: Vec<String>,
}

/// Writes the page.
#[must_use]
pub fn html(report: &CalibrationReport) -> String {
    let title = format!("{}: calibration", report.site);
    let mut out = format!(
        "<!doctype html>\n<html lang=\"en\">\n<head>\n<meta charset=\"utf-8\">\n\
         <meta name=\"viewport\" content=\"width=device-width, initial-scale=1\">\n\
         <meta http-equiv=\"Content-Security-Policy\" content=\"default-src 'none'; style-src 'unsafe-inline'\">\n\
         <title>{}</title>\n<style>{STYLE}{WIDE}</style>\n</head>\n<body>\n",
        escaped(&title)
    );
    let _ = write!(
        out,
        "<p class=\"soft\">{}</p>\n<h1>What {} of history say of the ground</h1>\n\
         <p>{} to {}, {} blocks. Written {}, by borewake {}.</p>\n<p class=\"notice\">{}</p>\n",
        escaped(&title),
        days(report.span),
        minute(report.span.0),
        minute(report.span.1),
        report.blocks,
        minute(report.made),
        env!("CARGO_PKG_VERSION"),
        escaped(NOTICE)
    );
    if !report.warnings.is_empty() {
        out += "<h2>Look at this first</h2>\n";
        list(&mut out, &report.warnings);
    }
    out += "<h2>Figures</h2>\n";
    sheet(&mut out, &report.figures);
    out += "<p class=\"soft\">Intervals hold the true value with 95 %, for a ground of the kind described. \
            T is transmissivity, S storativity.</p>\n<h2>What history could tell</h2>\n";
    list(&mut out, &report.told);
    if !report.grounds.rows.is_empty() {
        out += "<h2>Grounds compared</h2>\n";
        sheet(&mut out, &report.grounds);
        let _ = writeln!(out, "<p>{}</p>", escaped(&report.choice));
    }
    if !report.plan.is_empty() {
        let _ = writeln!(out, "<h2>Plan</h2>\n<figure>{}</figure>", report.plan);
    }
    out += "<h2>Gauges</h2>\n";
    sheet(&mut out, &report.gauges);
    out += "<p class=\"soft\">Below: block means of the readings over the fitted model, nuisances included, and what is left \
            of them: noise, and slow errors of gauge and meter. The band holds 95 % of what is left.</p>\n";
    for plot in &report.plots {
        let _ = writeln!(out, "<figure>{plot}</figure>");
    }
    out += "<h2>Changes of rate</h2>\n";
    if report.changes.is_empty() {
        let _ = writeln!(out, "<p>{}</p>", escaped(&report.no_changes));
    } else {
        out += "<p class=\"soft\">Slopes are taken in superposition time (Bourdet, Ayoub and Pirard 1989). Where flow is \
                radial they stand still; storage, skin and what lies far off show before and after. What other wells did \
                meanwhile is taken off as the model has it.</p>\n";
    }
    for (words, plot) in &report.changes {
        let _ = writeln!(
            out,
            "<figure>{plot}<figcaption class=\"soft\">{}</figcaption></figure>",
            escaped(words)
        );
    }
    out += "<div class=\"wide\">";
    quality(&mut out, &report.channels);
    out += "</div>\n<h2>Mesh and reduction</h2>\n";
    list(&mut out, &report.numerics);
    out += CAUTIONS;
    out + "</body>\n</html>\n"
}

/// Tables wider than a phone scroll by themselves.
const WIDE: &str = ".wide{overflow-x:auto}.wide td{white-space:nowrap}.wide table{font-size:.82rem}.wide th,.wide td{padding-right:.45rem}@media print{.wide td{white-space:normal}}li{margin:.25rem 0}figcaption{font-size:.9rem}\
@media (max-width:560px){th,td{padding-right:.5rem;font-size:.85rem}}\
@media print{.wide{overflow:visible}.wide td{white-space:normal}}";

/// What a reader must keep in mind about any calibration.
const CAUTIONS: &str = "<h2>Cautions</h2>\n<ul>\n\
<li>A leak that was already flowing in this history is part of the calibration and cannot be seen.</li>\n\
<li>Figures hold for the ground as described: a wrong edge, layer or line is made up for by wrong figures.</li>\n\
<li>Outside the rates and times of this history they say less.</li>\n\
<li>Commission again after workovers, acid, new wells or moved gauges.</li>\n</ul>\n";

fn days((from, to): (Stamp, Stamp)) -> String {
    let days = (to.seconds() - from.seconds()) / 86_400.0;
    format!("{days:.0} days")
}

fn list(out: &mut String, sentences: &[String]) {
    out.push_str("<ul>\n");
    for sentence in sentences {
        let _ = writeln!(out, "<li>{}</li>", escaped(sentence));
    }
    out.push_str("</ul>\n");
}

fn sheet(out: &mut String, sheet: &Sheet) {
    let class = |column: usize| {
        if sheet.numbers.contains(&column) {
            " class=\"n\""
        } else {
            ""
        }
    };
    out.push_str("<div class=\"wide\"><table>\n<tr>");
    for (column, head) in sheet.heads.iter().enumerate() {
        let _ = write!(out, "<th{}>{}</th>", class(column), escaped(head));
    }
    out.push_str("</tr>\n");
    for row in &sheet.rows {
        out.push_str("<tr>");
        for (column, cell) in row.iter().enumerate() {
            let _ = write!(out, "<td{}>{}</td>", class(column), escaped(cell));
        }
        out.push_str("</tr>\n");
    }
    out.push_str("</table></div>\n");
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_stay_names_and_every_part_is_there() {
        let sly = "<script>alert(1)</script>".to_owned();
        let one = |text: &str| Sheet {
            heads: vec![sly.clone(), "number".into()],
            numbers: vec![1],
            rows: vec![vec![text.to_owned(), "1".into()]],
        };
        let report = CalibrationReport {
            site: sly.clone(),
            warnings: vec![sly.clone()],
            figures: one(&sly),
            told: vec![sly.clone()],
            grounds: one("leaky & open"),
            choice: sly.clone(),
            gauges: one(&sly),
            changes: vec![(sly.clone(), "<svg></svg>".into())],
            numerics: vec![sly.clone()],
            ..CalibrationReport::default()
        };
        let page = html(&report);
        assert!(!page.contains("<script"), "{page}");
        for part in [
            "Look at this first",
            "Figures",
            "What history could tell",
            "Grounds compared",
            "leaky &amp; open",
            "Changes of rate",
            "Data quality",
            "Mesh and reduction",
            "Cautions",
            "<td class=\"n\">1</td>",
        ] {
            assert!(page.contains(part), "{part}");
        }
    }
}
