//! The dialog that opens and saves: a path with completion, a folder list, the recent files.

use super::colours::Palette;
use super::command::{BrowseFor, Command};
use super::fields::{at_right, dialog, remark};
use super::later::Later;
use eframe::egui::text::{CCursor, CCursorRange};
use eframe::egui::{Context, EventFilter, Key, RichText, ScrollArea, TextEdit, Ui, vec2};
use std::path::{MAIN_SEPARATOR, Path, PathBuf};

/// How many entries of a folder are listed.
const MOST: usize = 400;

/// What the dialog is for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Purpose {
    /// Opens a scan or a job.
    Open,
    /// Saves the job.
    Save,
}

/// One entry of a folder.
#[derive(Debug, Clone, PartialEq, Eq, PartialOrd, Ord)]
pub struct Entry {
    /// Folders come first.
    pub is_file: bool,
    /// Name.
    pub name: String,
}

/// The dialog's state.
pub struct PathDialog {
    /// What for.
    pub purpose: Purpose,
    /// The path as typed.
    pub text: String,
    listing: Later<PathBuf, Result<Vec<Entry>, String>>,
    begun: bool,
}

/// `~` is the user's home.
pub fn expanded(text: &str) -> PathBuf {
    let text = text.trim();
    match text.strip_prefix('~') {
        Some(rest) if rest.is_empty() || rest.starts_with(['/', MAIN_SEPARATOR]) => {
            match directories::BaseDirs::new() {
                Some(dirs) => dirs
                    .home_dir()
                    .join(rest.trim_start_matches(['/', MAIN_SEPARATOR])),
                None => PathBuf::from(text),
            }
        }
        _ => PathBuf::from(text),
    }
}

/// The folder to list and the beginning of a name in it.
pub fn split(text: &str) -> (PathBuf, String) {
    let path = expanded(text);
    let ends_in_folder = text.trim().is_empty()
        || text.trim_end().ends_with(['/', MAIN_SEPARATOR])
        || text.trim() == "~";
    if ends_in_folder {
        return (path, String::new());
    }
    let prefix = path
        .file_name()
        .map_or_else(String::new, |n| n.to_string_lossy().into_owned());
    (path.parent().unwrap_or(Path::new("")).to_owned(), prefix)
}

fn begins(name: &str, prefix: &str) -> bool {
    // Hidden entries only for those who begin with the dot.
    let hidden = name.starts_with('.') && !prefix.starts_with('.');
    !hidden && name.to_lowercase().starts_with(&prefix.to_lowercase())
}

/// What Tab makes of the text: all that the matching entries agree on, a folder with its slash.
pub fn completed(text: &str, entries: &[Entry]) -> Option<String> {
    let (_, prefix) = split(text);
    let matching: Vec<&Entry> = entries
        .iter()
        .filter(|e| begins(&e.name, &prefix))
        .collect();
    let first = matching.first()?;
    let mut common: Vec<char> = first.name.chars().collect();
    for entry in &matching {
        let same = common
            .iter()
            .zip(entry.name.chars())
            .take_while(|(a, b)| a.to_lowercase().eq(b.to_lowercase()))
            .count();
        common.truncate(same);
    }
    let common: String = common.into_iter().collect();
    let slash = matching.len() == 1 && !first.is_file;
    let base = text.trim_end().strip_suffix(&prefix)?;
    let slash = if slash { "/" } else { "" };
    let next = format!("{base}{common}{slash}");
    (next != text).then_some(next)
}

fn list(folder: &Path) -> Result<Vec<Entry>, String> {
    let folder = if folder.as_os_str().is_empty() {
        Path::new(".")
    } else {
        folder
    };
    let read = std::fs::read_dir(folder).map_err(|e| e.to_string())?;
    let mut entries: Vec<Entry> = read
        .flatten()
        .map(|entry| Entry {
            // Through links: a link to a folder is one.
            is_file: !entry.path().is_dir(),
            name: entry.file_name().to_string_lossy().into_owned(),
        })
        .collect();
    entries.sort();
    Ok(entries)
}

impl PathDialog {
    /// A dialog that begins at `text`.
    pub fn new(purpose: Purpose, text: String) -> Self {
        Self {
            purpose,
            text,
            listing: Later::default(),
            begun: false,
        }
    }

    /// Shows the dialog. `Stay` closes it.
    pub fn show(
        &mut self,
        ctx: &Context,
        recent: &[PathBuf],
        browse: bool,
        out: &mut Vec<Command>,
    ) {
        let modal = dialog(ctx, "path dialog").show(ctx, |ui| {
            ui.set_width(600.0);
            self.inside(ui, recent, browse, out);
        });
        if modal.should_close() {
            out.push(Command::Stay);
        }
    }

    fn inside(&mut self, ui: &mut Ui, recent: &[PathBuf], browse: bool, out: &mut Vec<Command>) {
        let (title, verb) = match self.purpose {
            Purpose::Open => ("Open a scan or a job", "Open"),
            Purpose::Save => ("Save the job", "Save"),
        };
        ui.heading(title);
        ui.add_space(6.0);
        let (folder, prefix) = split(&self.text);
        let wanted = folder.clone();
        self.listing.want(ui.ctx(), &folder, move || list(&wanted));
        let listing = self.listing.get(&folder).cloned();
        let entered = self.path_box(ui, listing.as_ref().and_then(|l| l.as_ref().ok()));
        ui.add_space(4.0);
        let mut take = entered.then(|| self.text.clone());
        ui.horizontal_top(|ui| {
            let both = self.purpose == Purpose::Open && !recent.is_empty();
            let width = if both { 290.0 } else { 590.0 };
            ui.vertical(|ui| {
                ui.set_width(width);
                self.folder_ui(ui, &folder, &prefix, listing.as_ref(), &mut take);
            });
            if both {
                ui.vertical(|ui| recent_ui(ui, recent, out));
            }
        });
        ui.add_space(6.0);
        ui.horizontal(|ui| {
            if browse && ui.button("Browse…").clicked() {
                out.push(Command::Browse(match self.purpose {
                    Purpose::Open => BrowseFor::Open,
                    Purpose::Save => BrowseFor::Save,
                }));
            }
            at_right(ui, |ui| {
                let can = !self.text.trim().is_empty();
                if ui
                    .add_enabled(can, eframe::egui::Button::new(verb))
                    .clicked()
                {
                    take = Some(self.text.clone());
                }
                if ui.button("Cancel").clicked() {
                    out.push(Command::Stay);
                }
            });
        });
        if let Some(text) = take {
            self.taken(&text, out);
        }
    }

    /// A folder is gone into, a file taken.
    fn taken(&mut self, text: &str, out: &mut Vec<Command>) {
        let path = expanded(text);
        if path.is_dir() {
            self.text = text.trim_end_matches('/').to_owned() + "/";
            self.begun = false;
            return;
        }
        match self.purpose {
            Purpose::Open => out.push(Command::Open(path)),
            Purpose::Save => {
                let named = path.extension().is_some();
                let path = if named {
                    path
                } else {
                    path.with_extension("toml")
                };
                out.push(Command::SaveAs(path));
            }
        }
    }

    /// The path box; whether Enter was pressed in it.
    fn path_box(&mut self, ui: &mut Ui, entries: Option<&Vec<Entry>>) -> bool {
        let label = ui.label("Path (Tab completes)");
        let id = ui.scope_id().with("path");
        let tab = ui.memory(|m| m.has_focus(id)) && ui.input(|i| i.key_pressed(Key::Tab));
        if let (true, Some(entries)) = (tab, entries)
            && let Some(next) = completed(&self.text, entries)
        {
            self.text = next;
            self.begun = false;
        }
        let edit = TextEdit::singleline(&mut self.text)
            .id(id)
            .hint_text("/folder/scan.tiff")
            .event_filter(EventFilter {
                tab: true,
                horizontal_arrows: true,
                vertical_arrows: false,
                escape: false,
            })
            .desired_width(590.0);
        let output = edit.show(ui);
        let response = output.response.response.clone().labelled_by(label.id);
        if !self.begun {
            // The cursor behind the text, ready to go on.
            self.begun = true;
            response.request_focus();
            let mut state = output.state;
            let end = CCursor::new(self.text.chars().count());
            state.cursor.set_char_range(Some(CCursorRange::one(end)));
            state.store(ui.ctx(), response.id);
        }
        response.lost_focus() && ui.input(|i| i.key_pressed(Key::Enter))
    }

    fn folder_ui(
        &self,
        ui: &mut Ui,
        folder: &Path,
        prefix: &str,
        listing: Option<&Result<Vec<Entry>, String>>,
        take: &mut Option<String>,
    ) {
        let p = Palette::of(ui);
        ui.label(RichText::new("In this folder").color(p.faint));
        let area = ScrollArea::vertical()
            .id_salt("folder list")
            .max_height(260.0)
            .min_scrolled_height(260.0)
            .auto_shrink(false);
        area.show(ui, |ui| {
            ui.spacing_mut().item_spacing.y = 1.0;
            let entries = match listing {
                None => {
                    ui.label("…");
                    return;
                }
                Some(Err(why)) => {
                    ui.label(format!("{}: {why}", folder.display()));
                    return;
                }
                Some(Ok(entries)) => entries,
            };
            let base = self.text.trim_end().strip_suffix(prefix).unwrap_or("");
            if let (Some(up), true) = (folder.parent(), prefix.is_empty())
                && !up.as_os_str().is_empty()
                && ui.selectable_label(false, "⬆ one up").clicked()
            {
                *take = Some(up.display().to_string());
            }
            let mut matching = entries
                .iter()
                .filter(|e| begins(&e.name, prefix))
                .peekable();
            if matching.peek().is_none() {
                ui.label(RichText::new("Nothing here begins like that").color(p.faint));
            }
            for entry in matching.take(MOST) {
                let text = if entry.is_file {
                    entry.name.clone()
                } else {
                    format!("{}/", entry.name)
                };
                let text = if entry.is_file {
                    RichText::new(text)
                } else {
                    RichText::new(text).color(p.accent)
                };
                if ui.selectable_label(false, text).clicked() {
                    *take = Some(format!("{base}{}", entry.name));
                }
            }
        });
    }
}

fn recent_ui(ui: &mut Ui, recent: &[PathBuf], out: &mut Vec<Command>) {
    let p = Palette::of(ui);
    ui.label(RichText::new("Opened last").color(p.faint));
    ScrollArea::vertical()
        .id_salt("recent list")
        .max_height(260.0)
        .auto_shrink(false)
        .show(ui, |ui| recent_list(ui, recent, out));
}

/// The files opened last, as things to click.
pub fn recent_list(ui: &mut Ui, recent: &[PathBuf], out: &mut Vec<Command>) {
    for path in recent {
        let name = path.file_name().map_or_else(
            || path.display().to_string(),
            |n| n.to_string_lossy().into_owned(),
        );
        let response = ui.selectable_label(false, name);
        if response.on_hover_text(path.display().to_string()).clicked() {
            out.push(Command::Open(path.clone()));
        }
    }
    if recent.is_empty() {
        remark(ui, "Nothing yet.");
    }
    ui.allocate_space(vec2(0.0, 0.0));
}

#[cfg(test)]
mod tests {
    use super::*;

    fn entries(names: &[&str]) -> Vec<Entry> {
        names
            .iter()
            .map(|n| Entry {
                is_file: !n.ends_with('/'),
                name: n.trim_end_matches('/').to_owned(),
            })
            .collect()
    }

    #[test]
    fn tab_completes_as_far_as_it_is_sure() {
        let all = entries(&["scans/", "shim.tiff", "shim.toml", ".hidden"]);
        assert_eq!(completed("/a/shi", &all).as_deref(), Some("/a/shim.t"));
        assert_eq!(completed("/a/SC", &all).as_deref(), Some("/a/scans/"));
        assert_eq!(
            completed("/a/shim.to", &all).as_deref(),
            Some("/a/shim.toml")
        );
        assert_eq!(completed("/a/shim.toml", &all), None);
        assert_eq!(completed("/a/x", &all), None);
        assert_eq!(completed("/a/.h", &all).as_deref(), Some("/a/.hidden"));
    }

    #[test]
    fn a_path_is_a_folder_and_a_beginning() {
        assert_eq!(split("/a/b"), (PathBuf::from("/a"), "b".to_owned()));
        assert_eq!(split("/a/b/"), (PathBuf::from("/a/b/"), String::new()));
        assert_eq!(split("b"), (PathBuf::new(), "b".to_owned()));
        assert_eq!(split(""), (PathBuf::new(), String::new()));
    }

    #[test]
    fn a_folder_lists_folders_first() {
        let dir = tempfile::tempdir().unwrap();
        std::fs::create_dir(dir.path().join("z")).unwrap();
        std::fs::write(dir.path().join("a.tiff"), b"").unwrap();
        let listed = list(dir.path()).unwrap();
        assert_eq!(listed, entries(&["z/", "a.tiff"]));
        assert!(list(&dir.path().join("none")).is_err());
    }

    #[test]
    fn saving_adds_the_ending_and_folders_are_entered() {
        let dir = tempfile::tempdir().unwrap();
        let mut out = Vec::new();
        let mut dialog = PathDialog::new(Purpose::Save, String::new());
        dialog.taken(&dir.path().display().to_string(), &mut out);
        assert!(out.is_empty() && dialog.text.ends_with('/'));
        dialog.taken("/jobs/a", &mut out);
        assert_eq!(out, [Command::SaveAs("/jobs/a.toml".into())]);
    }
}
