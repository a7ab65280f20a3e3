//! What the views ask for.

use super::settings::ThemeChoice;
use super::state::{ColourSpan, Line, Stage, Tool};
use super::view::View;
use crate::dimensions::Find;
use crate::heightmap::Region;
use crate::job::JobFile;
use crate::units::Length;
use std::path::PathBuf;

/// One thing a view asks the window to do.
#[derive(Debug, Clone, PartialEq)]
pub enum Command {
    /// Show a stage.
    Go(Stage),
    /// Show the dialog that opens files.
    AskOpen,
    /// Show the dialog that saves the job.
    AskSave,
    /// Open a scan or a job.
    Open(PathBuf),
    /// Show the system's file dialog.
    Browse(BrowseFor),
    /// Change the job; `gesture`: one of many edits of a drag.
    Edit {
        /// The changed job.
        job: Box<JobFile>,
        /// Whether it belongs to a drag that goes on.
        gesture: bool,
    },
    /// Look for things to measure and add them to the job.
    Find(Find),
    /// The drag is over.
    EndGesture,
    /// One step back.
    Undo,
    /// One step forth.
    Redo,
    /// Compute again what changed, files included.
    Run,
    /// Stop computing.
    Cancel,
    /// Save the job where it came from, or ask where.
    Save,
    /// Save the job there.
    SaveAs(PathBuf),
    /// Write the record into that folder.
    WriteRecord(PathBuf),
    /// Take a tool.
    Take(Tool),
    /// A region was drawn with the tool in hand.
    Placed(Tool, Region),
    /// The region of a dimension was dragged.
    MoveRegion(usize, Region),
    /// Look elsewhere; `None` = fit.
    Look(Option<View>),
    /// Move the section line.
    Section(Line),
    /// Choose a dimension of the job.
    Select(Option<usize>),
    /// Choose a result line, and with it its dimension.
    SelectLine(usize),
    /// Show the reliability marks or not.
    Reliability(bool),
    /// Show the ghost tip or not.
    Ghost(bool),
    /// Which heights the colours span.
    Span(ColourSpan),
    /// Light, dark or the system's.
    Theme(ThemeChoice),
    /// Lay a second tip over the first, with the standard uncertainty of its heights where it is a
    /// tip file, or take it off.
    LayOver(Option<(PathBuf, Option<Length>)>),
    /// Show or hide the help.
    Help(bool),
    /// Put a message away.
    Dismiss,
    /// Take up the job that was left unsaved.
    Recover,
    /// Forget the job that was left unsaved.
    Forget,
    /// Close without saving.
    CloseAnyway,
    /// Ask again what the file does not say.
    Ask,
    /// Do not close after all, or close the dialog at hand.
    Stay,
}

/// What the system's file dialog is for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum BrowseFor {
    /// A scan or a job to open.
    Open,
    /// Where to save the job.
    Save,
    /// The tip's file.
    Tip,
    /// The separate scan that shows the tip.
    TipScan,
    /// The file of a second tip.
    Second,
    /// Folder of the record.
    Record,
}
