//! The desktop window: plain state, commands, views. Nothing computes on the paint thread.
//!
//! A view is a plain data struct, a `..._ui` function that paints it, and commands out. [`run`] is
//! the only door. The window talks to the rest of the library through [`crate::job`].

mod app;
mod chores;
mod colours;
mod command;
mod desk;
mod dialogs;
mod dimensions_panel;
mod fields;
mod format;
mod frame;
mod grip;
mod history;
mod images;
#[cfg(test)]
mod invented;
mod known_panel;
mod laid_over;
mod later;
mod legend;
mod map_marks;
mod map_view;
mod marks;
mod open_dialog;
mod panels;
mod particle_bars;
mod reach_view;
mod record_view;
mod second_opinions;
mod section;
mod settings;
mod start;
mod state;
mod status;
mod table;
#[cfg(test)]
mod tests;
mod theme;
mod tip_evidence;
mod tip_panel;
mod tip_shape_view;
mod tip_view;
mod top;
mod view;

pub use start::{Start, WindowError, run};
