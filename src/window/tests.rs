//! The window driven without a screen: by names and roles, as a screen reader meets it.

mod opinions;

use super::app::{App, Dialog};
use super::command::Command;
use super::invented;
use super::laid_over::LaidOver;
use super::settings::Store;
use super::start::Start;
use super::state::{Stage, Tool};
use crate::dimensions::Kind;
use crate::job::{LevelMethod, TipFrom};
use eframe::egui::accesskit::Role;
use eframe::egui::{Key, Modifiers, Pos2, Theme, vec2};
use egui_kittest::Harness;
use egui_kittest::kittest::{NodeT, Queryable};

type Window = Harness<'static, Option<App>>;

fn open(theme: Theme, make: impl Fn(&eframe::egui::Context) -> App + 'static) -> Window {
    let mut window = Harness::builder()
        .with_size(vec2(1280.0, 800.0))
        .with_theme(theme)
        .build_ui_state(
            move |ui, app: &mut Option<App>| {
                app.get_or_insert_with(|| make(ui.ctx())).frame(ui);
            },
            None,
        );
    window.run_steps(3);
    window
}

/// A window on the invented job; without a worker nothing runs.
fn window() -> Window {
    open(Theme::Dark, |ctx| {
        let mut app = App::bare(ctx, None);
        app.put(invented::job(), invented::outcome());
        app
    })
}

fn app(window: &Window) -> &App {
    window.state().as_ref().unwrap()
}

fn click(window: &mut Window, label: &str) {
    window.get_by_label(label).click();
    window.run_steps(4);
}

/// Where a map lies.
fn map(window: &Window, begins: &str) -> eframe::egui::Rect {
    window
        .get_all_by_role(Role::Image)
        .find(|n| {
            n.accesskit_node()
                .label()
                .is_some_and(|l| l.starts_with(begins))
        })
        .unwrap()
        .rect()
}

fn drag(window: &mut Window, from: Pos2, to: Pos2) {
    window.drag_at(from);
    window.run_steps(1);
    for i in 1..=4 {
        window.hover_at(from + (to - from) * (i as f32 / 4.0));
        window.run_steps(1);
    }
    window.drop_at(to);
    window.run_steps(2);
}

#[test]
fn every_stage_shows_itself_and_every_input_has_a_name() {
    for theme in [Theme::Dark, Theme::Light] {
        let mut window = open(theme, |ctx| {
            let mut app = App::bare(ctx, None);
            app.put(invented::job(), invented::outcome());
            app
        });
        for (stage, button, seen) in [
            (Stage::Scan, "Scan, done", "Levelling"),
            (Stage::Tip, "Tip, done", "Where the tip comes from"),
            (Stage::Surface, "Surface, done", "What the tip touched"),
            (
                Stage::Dimensions,
                "Dimensions, done",
                "Dimensions of this job",
            ),
            (Stage::Record, "Record, waiting", "Calibration of the axes"),
        ] {
            click(&mut window, button);
            assert_eq!(app(&window).stage, stage);
            window.get_by_label(seen);
            window.check_accessibility();
        }
    }
}

#[test]
fn results_are_read_as_scanned_and_corrected() {
    let mut window = window();
    click(&mut window, "Dimensions, done");
    for text in [
        "128.70 ± 0.90 nm",
        "100.4 ± 2.2 nm",
        "97.9 … 103.1 nm",
        "bounded",
    ] {
        window.get_by_label(text);
    }
    click(&mut window, "line 1");
    assert_eq!(app(&window).chosen.request, Some(0));
    assert_eq!(app(&window).chosen.line, Some(0));
    window.get_by_label("Budget");
    window.get_by_label("The right edge was not touched.");
}

#[test]
fn both_maps_speak() {
    let mut window = window();
    click(&mut window, "Surface, done");
    let labels: Vec<String> = window
        .get_all_by_role(Role::Image)
        .filter_map(|n| n.accesskit_node().label())
        .collect();
    for begins in [
        "As scanned map, 96 by 64 pixels",
        "Corrected map",
        "Section: as scanned",
    ] {
        assert!(labels.iter().any(|l| l.starts_with(begins)), "{labels:?}");
    }
}

#[test]
fn a_second_tip_is_laid_over_and_told_apart() {
    let mut window = window();
    click(&mut window, "Tip, done");
    let app = window.state_mut().as_mut().unwrap();
    let tip = app.shown.tip.clone().unwrap();
    app.laid = Some(LaidOver::new("earlier.npy".into(), None, tip));
    // The comparison comes from another thread.
    let mut tries = 0;
    while window
        .query_by_label_contains("Not distinguishable")
        .is_none()
    {
        std::thread::sleep(std::time::Duration::from_millis(5));
        window.run_steps(1);
        tries += 1;
        assert!(tries < 2000, "no comparison");
    }
    window.get_by_label("First: earlier.npy. Second: the tip of this job.");
    window.check_accessibility();
    for (sheet, says) in [
        ("Probe shape", "Probe shape characteristic: along x"),
        ("Evidence", "Scan map. The tip was given"),
        ("Profiles", "Tip profile Along x"),
    ] {
        click(&mut window, sheet);
        let speaks = |window: &Window| {
            let mut images = window.get_all_by_role(Role::Image);
            images.any(|n| {
                let label = n.accesskit_node().label();
                label.is_some_and(|l| l.starts_with(says))
            })
        };
        let mut tries = 0;
        while !speaks(&window) {
            std::thread::sleep(std::time::Duration::from_millis(5));
            window.run_steps(1);
            tries += 1;
            assert!(tries < 2000, "{says}");
        }
    }
    click(&mut window, "Take it off");
    assert!(window.state().as_ref().unwrap().laid.is_none());
}

#[test]
fn a_region_is_dragged_into_a_dimension_moved_and_undone() {
    let mut window = window();
    click(&mut window, "Dimensions, done");
    window.key_press(Key::W);
    window.run_steps(2);
    assert_eq!(app(&window).desk.tool, Tool::Place(Kind::LineWidth));
    let pane = map(&window, "Corrected map");
    let c = pane.center();
    drag(&mut window, c + vec2(10.0, -30.0), c + vec2(90.0, 30.0));
    let request = |w: &Window| {
        app(w)
            .opened
            .as_ref()
            .unwrap()
            .history
            .now()
            .dimensions
            .clone()
    };
    let placed = request(&window);
    assert_eq!((placed.len(), placed[1].name.as_str()), (2, "line 2"));
    assert_eq!(app(&window).chosen.request, Some(1));
    let region = placed[1].region.unwrap();
    assert!(region.left > 96.0 && region.width > 20.0);
    assert_eq!(
        (region.left % 2.0, region.width % 2.0),
        (0.0, 0.0),
        "on pixels"
    );

    // By its inside, away from the section line: moves, and is one step of undo.
    drag(&mut window, c + vec2(50.0, -20.0), c + vec2(30.0, -20.0));
    let moved = request(&window)[1].region.unwrap();
    assert!(moved.left < region.left && moved.width == region.width);
    window.key_press_modifiers(Modifiers::COMMAND, Key::Z);
    window.run_steps(2);
    assert_eq!(request(&window)[1].region, Some(region));
    window.key_press_modifiers(Modifiers::COMMAND, Key::Z);
    window.run_steps(2);
    assert_eq!(request(&window).len(), 1);
    window.key_press_modifiers(Modifiers::COMMAND | Modifiers::SHIFT, Key::Z);
    window.run_steps(2);
    assert_eq!(request(&window).len(), 2);
}

#[test]
fn the_section_line_is_dragged_and_keys_move_it() {
    let mut window = window();
    click(&mut window, "Surface, done");
    let before = app(&window).desk.line.unwrap();
    let c = map(&window, "As scanned map").center();
    drag(&mut window, c, c + vec2(0.0, 40.0));
    let dragged = app(&window).desk.line.unwrap();
    assert!(dragged.from.1 > before.from.1 && dragged.to.1 == dragged.from.1);
    window.key_press(Key::ArrowUp);
    window.run_steps(2);
    let stepped = app(&window).desk.line.unwrap();
    assert!(
        (dragged.from.1 - stepped.from.1 - 2.0).abs() < 1e-9,
        "one pixel"
    );
}

#[test]
fn the_ghost_tip_stands_under_the_pointer() {
    let mut window = window();
    click(&mut window, "Surface, done");
    window.key_press(Key::G);
    window.run_steps(1);
    assert!(app(&window).desk.ghost);
    let c = map(&window, "Corrected map").center();
    window.hover_at(c + vec2(5.0, 25.0));
    window.run_steps(3);
    let line = app(&window).desk.line.unwrap();
    let pointer = app(&window).desk.pointer.unwrap();
    assert!(pointer.1 > line.from.1, "the line set stays");
    assert!(app(&window).cuts.has_ghost());
}

#[test]
fn the_wheel_zooms_and_f_fits() {
    let mut window = window();
    click(&mut window, "Surface, done");
    let c = map(&window, "As scanned map").center();
    window.hover_at(c);
    window.run_steps(1);
    window.event(eframe::egui::Event::MouseWheel {
        unit: eframe::egui::MouseWheelUnit::Line,
        delta: vec2(0.0, 3.0),
        phase: eframe::egui::TouchPhase::Move,
        modifiers: Modifiers::NONE,
        source: eframe::egui::MouseWheelSource::Unknown,
    });
    window.run_steps(10);
    assert!(app(&window).desk.view.is_some());
    window.key_press(Key::F);
    window.run_steps(1);
    // Smooth scrolling may still be coming to rest.
    window.run_steps(20);
    window.key_press(Key::F);
    window.run_steps(2);
    assert!(app(&window).desk.view.is_none());
}

#[test]
fn settings_are_edited_and_bad_ones_refused() {
    let mut window = window();
    click(&mut window, "Tip, done");
    let job = |w: &Window| app(w).opened.as_ref().unwrap().history.now().clone();
    let field =
        window.get_by(|n| n.role() == Role::TextInput && n.label().as_deref() == Some("Support"));
    field.focus();
    window.run_steps(1);
    window
        .get_by(|n| n.role() == Role::TextInput && n.label().as_deref() == Some("Support"))
        .type_text("130 nm");
    window.run_steps(1);
    window.key_press(Key::Enter);
    window.run_steps(2);
    assert_eq!(job(&window).tip.support.unwrap().nm(), 130.0);

    let field =
        window.get_by(|n| n.role() == Role::TextInput && n.label().as_deref() == Some("Threshold"));
    field.focus();
    window.run_steps(1);
    window
        .get_by(|n| n.role() == Role::TextInput && n.label().as_deref() == Some("Threshold"))
        .type_text("3 furlong");
    window.run_steps(1);
    window.key_press(Key::Enter);
    window.run_steps(3);
    assert_eq!(job(&window).tip.threshold, None);
    window.get_by_label_contains("unknown unit");
}

#[test]
fn a_job_that_cannot_be_used_is_refused_with_the_reason() {
    let mut window = window();
    let app = window.state_mut().as_mut().unwrap();
    let before = app.opened.as_ref().unwrap().history.now().clone();
    let mut job = before.clone();
    job.tip.from = TipFrom::Model;
    app.execute(Command::Edit {
        job: Box::new(job),
        gesture: false,
    });
    assert_eq!(app.opened.as_ref().unwrap().history.now(), &before);
    let message = app.message.clone().unwrap();
    assert!(
        message.failed && message.what.contains("radius"),
        "{message:?}"
    );
    window.run_steps(2);
    click(&mut window, "Put away");
    assert!(window.state().as_ref().unwrap().message.is_none());
}

#[test]
fn help_and_open_are_reached_by_key_and_put_away() {
    let mut window = window();
    window.key_press(Key::F1);
    window.run_steps(3);
    window.get_by_label("Keys and pointer");
    window.key_press(Key::Escape);
    window.run_steps(3);
    assert!(matches!(app(&window).dialog, Dialog::None));
    window.key_press_modifiers(Modifiers::COMMAND, Key::O);
    window.run_steps(4);
    window.get_by_label("Open a scan or a job");
    window.check_accessibility();
    window.key_press(Key::Escape);
    window.run_steps(3);
    assert!(matches!(app(&window).dialog, Dialog::None));
}

#[test]
fn an_empty_window_offers_to_open() {
    let window = open(Theme::Light, |ctx| App::bare(ctx, None));
    window.get_by_label("Open a scan or a job");
    window.get_by_label("Scan, waiting");
}

/// Waits for the worker; a real one, with a real file.
fn wait(window: &mut Window, until: impl Fn(&App) -> bool) {
    for _ in 0..2000 {
        window.run_steps(1);
        if until(app(window)) {
            return;
        }
        std::thread::sleep(std::time::Duration::from_millis(10));
    }
    panic!("nothing came of it");
}

fn file_with(name: &str, folder: &std::path::Path) -> std::path::PathBuf {
    let path = folder.join(name);
    let outcome = invented::outcome();
    let heights = outcome.scan.as_ref().unwrap().heights().to_owned();
    ndarray_npy::write_npy(&path, &heights).unwrap();
    path
}

#[test]
fn a_file_without_a_scale_is_asked_for_and_then_opened() {
    let folder = tempfile::tempdir().unwrap();
    let path = file_with("bare.npy", folder.path());
    let store = Store::at(folder.path().join("data"));
    let mut window = open(Theme::Dark, move |ctx| {
        App::new(ctx, Start::Scan(path.clone()), Some(store.clone()))
    });
    wait(&mut window, |app| matches!(app.dialog, Dialog::Question(_)));
    window.run_steps(2);
    // Put away, it can be asked again.
    window.key_press(Key::Escape);
    window.run_steps(3);
    assert!(matches!(app(&window).dialog, Dialog::None));
    click(&mut window, "Say what is missing…");
    assert!(matches!(app(&window).dialog, Dialog::Question(_)));
    let field = |n: &egui_kittest::kittest::AccessKitNode<'_>| {
        n.role() == Role::TextInput && n.label().as_deref() == Some("Pixel pitch along x")
    };
    window.get_by(field).focus();
    window.run_steps(1);
    window.get_by(field).type_text("2 nm");
    window.run_steps(1);
    // No unit is chosen beforehand.
    window.get_by_label("Open with this").click();
    window.run_steps(2);
    assert!(matches!(app(&window).dialog, Dialog::Question(_)));
    window
        .get_by_role_and_label(Role::ComboBox, "A stored 1 is one")
        .click();
    window.run_steps(3);
    window.get_by_role_and_label(Role::Button, "nm").click();
    window.run_steps(3);
    window.get_by_label("Open with this").click();
    wait(&mut window, |app| app.shown.level.is_some());
    let scan = &app(&window).opened.as_ref().unwrap().history.now().scan;
    assert_eq!(scan.pitch.unwrap()[1].nm(), 2.0);
    assert_eq!(scan.height_unit.as_deref(), Some("nm"));
}

#[test]
fn a_model_job_runs_and_is_saved() {
    let folder = tempfile::tempdir().unwrap();
    file_with("scan.npy", folder.path());
    let job = folder.path().join("job.toml");
    let text = "[scan]\nfile = \"scan.npy\"\npitch = [\"2 nm\", \"2 nm\"]\nheight-unit = \"nm\"\n\
                [tip]\nfrom = \"model\"\nradius = \"8 nm\"\nhalf-angle = 15\nsupport = \"50 nm\"\n";
    std::fs::write(&job, text).unwrap();
    let path = job.clone();
    let mut window = open(Theme::Dark, move |ctx| {
        App::new(ctx, Start::file(path.clone()), None)
    });
    wait(&mut window, |app| {
        !app.running() && app.shown.dimensions.is_some()
    });
    let surface = app(&window).shown.surface.clone().unwrap();
    let app_mut = window.state_mut().as_mut().unwrap();
    let mut edited = app_mut.opened.as_ref().unwrap().history.now().clone();
    edited.level.method = LevelMethod::None;
    app_mut.execute(Command::Edit {
        job: Box::new(edited),
        gesture: false,
    });
    assert!(app_mut.shown.surface.is_some(), "the last result stays");
    wait(&mut window, |app| !app.running());
    assert!(!std::sync::Arc::ptr_eq(
        &surface,
        app(&window).shown.surface.as_ref().unwrap()
    ));
    window.state_mut().as_mut().unwrap().execute(Command::Save);
    wait(&mut window, |app| {
        !app.opened.as_ref().unwrap().history.unsaved()
    });
    assert!(
        std::fs::read_to_string(&job)
            .unwrap()
            .contains("method = \"none\"")
    );
}

#[test]
fn a_damaged_file_and_a_missing_one_say_so() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("cut.tiff");
    std::fs::write(&path, b"II*\0\x08\0\0\0\x05").unwrap();
    for path in [path, folder.path().join("none.tiff")] {
        let name = path.file_name().unwrap().to_string_lossy().into_owned();
        let mut window = open(Theme::Dark, move |ctx| {
            App::new(ctx, Start::file(path.clone()), None)
        });
        wait(&mut window, |app| app.message.is_some());
        let message = app(&window).message.clone().unwrap();
        assert!(
            message.failed && message.what.contains(&name),
            "{message:?}"
        );
        window.run_steps(2);
    }
}
