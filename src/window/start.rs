//! Opens the window, or says plainly why there can be none.

use super::app::App;
use super::settings::Store;
use crate::job::Job;
use eframe::egui::{IconData, ViewportBuilder};
use std::panic::{AssertUnwindSafe, catch_unwind, set_hook, take_hook};
use std::path::PathBuf;

/// What the window opens with.
#[derive(Debug, Clone, Default)]
pub enum Start {
    /// An empty desk.
    #[default]
    Nothing,
    /// A scan.
    Scan(PathBuf),
    /// A job file.
    Job(PathBuf),
    /// A job that is in no file.
    InMemory(Box<Job>),
}

impl Start {
    /// A file given by the user: a job by its ending `.toml`, else a scan.
    pub fn file(path: impl Into<PathBuf>) -> Self {
        let path = path.into();
        if path
            .extension()
            .is_some_and(|e| e.eq_ignore_ascii_case("toml"))
        {
            Self::Job(path)
        } else {
            Self::Scan(path)
        }
    }
}

/// Why there is no window.
///
/// After any of these a second attempt in the same process fails too: go on without a window.
#[derive(Debug, thiserror::Error)]
pub enum WindowError {
    /// There is no screen to open a window on, or it does not answer.
    #[error("no display: {0}")]
    NoDisplay(String),
    /// The screen cannot draw with OpenGL.
    #[error("no OpenGL: {0}")]
    NoGraphics(String),
    /// A library of the system that the window needs is not installed.
    #[error("a system library is missing: {0}")]
    MissingLibrary(String),
    /// Anything else.
    #[error("the window failed: {0}")]
    Failed(String),
}

/// Opens the window and returns when it is closed. Must be called on the main thread, once.
///
/// Errors: see [`WindowError`]; none of them leaves a window behind.
pub fn run(start: Start) -> Result<(), WindowError> {
    if cfg!(target_os = "linux") && !any_display() {
        return Err(WindowError::NoDisplay(
            "neither DISPLAY nor WAYLAND_DISPLAY is set".to_owned(),
        ));
    }
    let options = eframe::NativeOptions {
        viewport: ViewportBuilder::default()
            .with_title("truewidth")
            .with_app_id("truewidth")
            .with_inner_size([1280.0, 800.0])
            .with_min_inner_size([940.0, 600.0])
            .with_drag_and_drop(true)
            .with_icon(icon()),
        renderer: eframe::Renderer::Glow,
        ..eframe::NativeOptions::default()
    };
    let mut opened = false;
    let flag = &mut opened;
    // A missing libxkbcommon-x11 panics inside the windowing library. While opening, its message
    // is held back: the caller says it in plain words.
    let hook = take_hook();
    set_hook(Box::new(|_| {}));
    let (give_back, hook_back) = std::sync::mpsc::channel();
    let _ = give_back.send(hook);
    let result = catch_unwind(AssertUnwindSafe(|| {
        eframe::run_native(
            "truewidth",
            options,
            Box::new(|cc| {
                *flag = true;
                if let Ok(hook) = hook_back.try_recv() {
                    set_hook(hook);
                }
                Ok(Box::new(App::new(&cc.egui_ctx, start, Store::find())))
            }),
        )
    }));
    match result {
        Ok(Ok(())) => Ok(()),
        Ok(Err(error)) => Err(sorted(error)),
        Err(panic) if opened => std::panic::resume_unwind(panic),
        Err(panic) => {
            let what = panic
                .downcast_ref::<String>()
                .cloned()
                .or_else(|| panic.downcast_ref::<&str>().map(|s| (*s).to_owned()))
                .unwrap_or_default();
            Err(WindowError::MissingLibrary(what))
        }
    }
}

fn any_display() -> bool {
    ["DISPLAY", "WAYLAND_DISPLAY", "WAYLAND_SOCKET"]
        .iter()
        .any(|name| std::env::var_os(name).is_some_and(|v| !v.is_empty()))
}

fn sorted(error: eframe::Error) -> WindowError {
    let text = error.to_string();
    match error {
        eframe::Error::NoGlutinConfigs(..)
        | eframe::Error::Glutin(_)
        | eframe::Error::OpenGL(_) => WindowError::NoGraphics(text),
        eframe::Error::WinitEventLoop(_) if text.contains("Library") || text.contains(".so") => {
            WindowError::MissingLibrary(text)
        }
        eframe::Error::WinitEventLoop(_) | eframe::Error::Winit(_) => {
            // The front of the message names a source file of the windowing library.
            let plain = text
                .rsplit_once(": ")
                .map_or(text.as_str(), |(_, last)| last);
            WindowError::NoDisplay(plain.to_owned())
        }
        _ => WindowError::Failed(text),
    }
}

fn icon() -> IconData {
    let bytes = include_bytes!("../../assets/icon.png");
    match image::load_from_memory_with_format(bytes, image::ImageFormat::Png) {
        Ok(image) => {
            let image = image.into_rgba8();
            let (width, height) = image.dimensions();
            IconData {
                rgba: image.into_raw(),
                width,
                height,
            }
        }
        // A window without an icon is still a window.
        Err(_) => IconData::default(),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_file_is_a_job_by_its_ending() {
        assert!(matches!(Start::file("a/b.TOML"), Start::Job(_)));
        assert!(matches!(Start::file("a/b.tiff"), Start::Scan(_)));
    }

    #[test]
    fn the_icon_is_there() {
        let icon = icon();
        assert_eq!((icon.width, icon.height), (128, 128));
        assert_eq!(icon.rgba.len(), 128 * 128 * 4);
    }
}
