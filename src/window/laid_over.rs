//! A second tip laid over the first: where it comes from, and how the two differ.

use super::command::{BrowseFor, Command};
use super::fields::{caution, fact, heading, length_row, remark, text_row};
use super::format;
use super::panels::Panel;
use crate::job::{TipFrom, TipResult};
use crate::tip::compare::{Change, Comparison, Verdict};
use crate::units::Length;
use eframe::egui::Ui;
use std::path::PathBuf;
use std::sync::Arc;

/// The second tip.
pub struct LaidOver {
    /// Its file.
    pub path: PathBuf,
    /// Standard uncertainty of its heights as stated, for a tip file.
    pub uncertainty: Option<Length>,
    /// The tip.
    pub found: Arc<TipResult>,
    /// The tip it was compared with, and what came of it; `None` while under way.
    pub compared: Option<(Arc<TipResult>, Result<Comparison, String>)>,
    /// The tip that a comparison was asked for.
    asked: Option<Arc<TipResult>>,
}

impl LaidOver {
    /// Just opened.
    pub fn new(path: PathBuf, uncertainty: Option<Length>, found: Arc<TipResult>) -> Self {
        Self {
            path,
            uncertainty,
            found,
            compared: None,
            asked: None,
        }
    }

    /// Its name.
    pub fn name(&self) -> String {
        let name = self.path.file_name().unwrap_or(self.path.as_os_str());
        name.to_string_lossy().into_owned()
    }

    /// Whether a comparison with `tip` has to be asked for; from then on it counts as asked.
    pub fn must_compare(&mut self, tip: &Arc<TipResult>) -> bool {
        let asked = self.asked_about(tip);
        if !asked {
            self.asked = Some(Arc::clone(tip));
        }
        !asked
    }

    /// Whether `tip` is the one last asked about.
    pub fn asked_about(&self, tip: &Arc<TipResult>) -> bool {
        self.asked.as_ref().is_some_and(|a| Arc::ptr_eq(a, tip))
    }

    /// The comparison with `tip`, once it is there.
    fn with(&self, tip: &Arc<TipResult>) -> Option<&Result<Comparison, String>> {
        let (of, result) = self.compared.as_ref()?;
        Arc::ptr_eq(of, tip).then_some(result)
    }
}

/// The panel's part: chooses the second tip and tells how this one differs from it.
pub fn laid_ui(ui: &mut Ui, panel: &Panel, out: &mut Vec<Command>) {
    heading(ui, "Second tip");
    let help = "A tip file or a job, laid over this tip in the drawings: an earlier state of the same probe, say. It changes no result.";
    let now = panel
        .laid
        .map_or(String::new(), |l| l.path.display().to_string());
    if let Some(path) = text_row(ui, "Lay over", help, &now, "path of a tip or a job") {
        let path = (!path.is_empty()).then(|| (PathBuf::from(path), None));
        out.push(Command::LayOver(path));
    }
    if let Some(laid) = panel.laid.filter(|l| l.found.from == TipFrom::File) {
        let help = "Standard uncertainty of the second tip's surface. Without it nothing can be said of wear.";
        if let Some(u) = length_row(ui, "Its uncertainty", help, laid.uncertainty, "not stated") {
            out.push(Command::LayOver(Some((laid.path.clone(), u))));
        }
    }
    ui.horizontal(|ui| {
        if panel.browse && ui.button("Browse for a second tip…").clicked() {
            out.push(Command::Browse(BrowseFor::Second));
        }
        if panel.laid.is_some() && ui.button("Take it off").clicked() {
            out.push(Command::LayOver(None));
        }
    });
    let (Some(laid), Some(tip)) = (panel.laid, &panel.outcome.tip) else {
        return;
    };
    match laid.with(tip) {
        None => remark(ui, "The two are being compared."),
        Some(Err(why)) => caution(ui, why),
        Some(Ok(found)) => comparison_ui(ui, found, &laid.name()),
    }
}

fn comparison_ui(ui: &mut Ui, found: &Comparison, name: &str) {
    remark(ui, &format!("First: {name}. Second: the tip of this job."));
    if found.verdict == Verdict::NotDistinguishable {
        ui.label(found.verdict.words());
    } else {
        caution(ui, found.verdict.words());
    }
    let change = |ui: &mut Ui, name: &str, change: &Option<Change>, unit: &str| {
        let text = match change {
            Some(c) => format!("{}{unit}", format::with_u(c.difference, Some(c.expanded()))),
            None => "not known of both".to_owned(),
        };
        let response = fact(ui, name, text);
        if let Some(c) = change {
            response.on_hover_text(format!(
                "{}{unit} and {}{unit}; ± is the expanded uncertainty of the difference, 95 %",
                format::significant(c.values[0], 4),
                format::significant(c.values[1], 4)
            ));
        }
    };
    change(ui, "Radius differs by", &found.radius, " nm");
    change(ui, "Half-angle by", &found.half_angle, "°");
    fact(
        ui,
        "Surface by",
        format!(
            "{} nm rms, mean {} nm",
            format::significant(found.normal_rms_nm, 3),
            format::with_u(found.normal_mean_nm, Some(found.normal_u_nm))
        ),
    )
    .on_hover_text("Along the normal, apices together; a positive mean: this tip is the blunter");
    fact(
        ui,
        "Compared to",
        format!(
            "{} nm depth, {} cells",
            format::significant(found.depth_nm, 3),
            found.cells
        ),
    );
    for note in &found.notes {
        remark(ui, note);
    }
}
