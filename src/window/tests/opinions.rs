//! Second opinions, certified shapes, planned features, particles.

use super::*;
use crate::dimensions::{Dimension, Evidence, Fitted, ModelFit, MonteCarlo, Request};
use crate::job::{Job, JobFile, KnownShape, Outcome, Reliability};
use std::sync::Arc;

fn job(window: &Window) -> JobFile {
    app(window).opened.as_ref().unwrap().history.now().clone()
}

fn type_into(window: &mut Window, label: &str, text: &str) {
    let field = |n: &egui_kittest::kittest::AccessKitNode<'_>| {
        n.role() == Role::TextInput && n.label().as_deref() == Some(label)
    };
    window.get_by(field).focus();
    window.run_steps(1);
    window.get_by(field).type_text(text);
    window.run_steps(1);
    window.key_press(Key::Enter);
    window.run_steps(3);
}

fn choose(window: &mut Window, name: &str, choice: &str) {
    window.get_by_role_and_label(Role::ComboBox, name).click();
    window.run_steps(3);
    window.get_by_role_and_label(Role::Button, choice).click();
    window.run_steps(4);
}

fn image(window: &Window, begins: &str) -> Option<String> {
    window
        .get_all_by_role(Role::Image)
        .filter_map(|n| n.accesskit_node().label())
        .find(|l| l.starts_with(begins))
}

fn window_on(outcome: Outcome, requests: Vec<Request>) -> Window {
    open(Theme::Light, move |ctx| {
        let mut app = App::bare(ctx, None);
        let mut job = invented::job();
        job.file.dimensions = requests.clone();
        app.put(job, outcome.clone());
        app
    })
}

fn judged() -> Dimension {
    Dimension {
        evidence: Evidence {
            reliability: Some(Reliability {
                touched: 0.7,
                bounded: 0.2,
                never: 0.1,
            }),
            model_fit: Some(ModelFit {
                model: "line with sloped walls",
                value: Some(Fitted {
                    name: "width at 50 %".to_owned(),
                    unit: "nm",
                    value: Some(108.2),
                    u: Some(0.6),
                    low: Some(107.0),
                    high: Some(109.4),
                    not_determined: None,
                }),
                parameters: vec![Fitted {
                    name: "left wall angle".to_owned(),
                    unit: "deg",
                    value: None,
                    u: None,
                    low: Some(74.0),
                    high: None,
                    not_determined: Some("steeper than the tip".to_owned()),
                }],
                misfit: Some(1.1),
                agrees: Some(false),
                reason: None,
            }),
            monte_carlo: Some(MonteCarlo {
                trials: 1000,
                count: 998,
                mean: 100.5,
                u: 1.2,
                low: 97.7,
                high: 103.2,
                shortest_low: 97.8,
                shortest_high: 103.1,
                tolerance: 0.3,
                agrees: Some(true),
            }),
        },
        ..invented::dimension("line 1")
    }
}

#[test]
fn second_opinions_stand_in_the_particulars() {
    let mut outcome = invented::outcome();
    outcome.dimensions = Some(Arc::new(vec![judged()]));
    let mut window = window_on(outcome, invented::job().file.dimensions);
    click(&mut window, "Dimensions, done");
    click(&mut window, "line 1");
    for text in [
        "The model fit contradicts the corrected value.",
        "108.20 nm, u = 0.60 nm; contradicts",
        "107.00 … 109.40 nm",
        "not determined (steeper than the tip); at least 74°",
        "97.7 … 103.2 nm; agrees with the budget",
        "100.5 ± 1.2 nm, 998 of 1000 trials",
        "70.0 %",
    ] {
        assert!(window.query_by_label(text).is_some(), "{text}");
    }
    window.check_accessibility();
}

#[test]
fn second_opinions_are_settings_that_can_be_undone_and_bad_ones_are_refused() {
    let mut window = window();
    click(&mut window, "Dimensions, done");
    click(&mut window, "Fit a model as a second opinion");
    assert!(job(&window).model_fit);
    click(&mut window, "Monte Carlo of the whole chain");
    assert_eq!(job(&window).monte_carlo.unwrap().trials, 200);
    type_into(&mut window, "Trials", "0");
    // Typed behind what stood there.
    assert_eq!(job(&window).monte_carlo.unwrap().trials, 2_000);
    type_into(&mut window, "Trials", "00000");
    assert_eq!(job(&window).monte_carlo.unwrap().trials, 2_000);
    assert!(app(&window).message.as_ref().is_some_and(|m| m.failed));
    for (fit, trials) in [(true, Some(200)), (true, None), (false, None)] {
        window.state_mut().as_mut().unwrap().execute(Command::Undo);
        let job = job(&window);
        assert_eq!(job.model_fit, fit);
        assert_eq!(job.monte_carlo.map(|m| m.trials), trials);
    }
}

#[test]
fn a_known_shape_is_taken_once_what_is_certified_is_complete() {
    let mut window = window();
    click(&mut window, "Tip, done");
    choose(&mut window, "From", "Known shape");
    assert_eq!(job(&window).tip.from, TipFrom::Blind);
    window.get_by_label_contains("Not in use yet. [tip] known: shape = \"ridges\" without width");
    type_into(&mut window, "Standard uncertainty of width", "0.4 nm");
    assert_eq!(job(&window).tip.from, TipFrom::Blind);
    type_into(&mut window, "Width", "70 nm");
    let tip = job(&window).tip;
    assert_eq!(tip.from, TipFrom::KnownShape);
    let known = tip.known.unwrap();
    assert_eq!(known.width.unwrap().nm(), 70.0);
    assert_eq!(known.u_width.unwrap().nm(), 0.4);
    type_into(&mut window, "Wall angle, °", "steep");
    window.get_by_label_contains("\"steep\" is not a number");
    choose(&mut window, "Corrects", "Free form");
    assert_eq!(job(&window).tip.way, Some(crate::job::Way::FreeForm));
    type_into(&mut window, "Tip's scan", "gauge.tiff");
    assert_eq!(job(&window).tip.scan.unwrap().to_str(), Some("gauge.tiff"));
    // A step needs nothing certified, a sphere does.
    choose(&mut window, "Shape", "Step");
    assert_eq!(job(&window).tip.known.unwrap().shape, KnownShape::Step);
    choose(&mut window, "Shape", "Spheres");
    assert_eq!(job(&window).tip.known.unwrap().shape, KnownShape::Step);
    window.get_by_label_contains("without diameter");
    window.check_accessibility();
    // Undo ends what is not complete.
    window.state_mut().as_mut().unwrap().execute(Command::Undo);
    window.run_steps(3);
    assert!(window.query_by_label_contains("Not in use yet").is_none());
    assert_eq!(job(&window).tip.known.unwrap().shape, KnownShape::Ridges);
}

#[test]
fn a_planned_trench_is_answered_in_figures_and_in_a_drawing() {
    let mut window = window();
    click(&mut window, "Tip, done");
    click(&mut window, "Reach");
    window.get_by_label("Say how wide and how deep the trench is planned.");
    window.check_accessibility();
    type_into(&mut window, "Width", "40 nm");
    type_into(&mut window, "Depth", "20 nm");
    let mut tries = 0;
    while image(&window, "Drawing: ").is_none() {
        std::thread::sleep(std::time::Duration::from_millis(5));
        window.run_steps(1);
        tries += 1;
        assert!(tries < 4000, "no drawing");
    }
    let said = image(&window, "Drawing: ").unwrap();
    assert!(said.contains("to the bottom, 20 nm"), "{said}");
    window.get_by_label_contains("40 nm imaged as");
    let before = job(&window);
    assert_eq!(before, job(&window), "a plan is no setting of the job");
    window.check_accessibility();
}

#[test]
fn particles_are_shown_as_bars() {
    let particle = |i: usize, quantity: &str| {
        let mut line = invented::dimension(&format!("particles {i}"));
        line.kind = Kind::Particle;
        line.at = None;
        line.quantity = quantity.to_owned();
        if let (Some(s), Some(c)) = (&mut line.as_scanned, &mut line.corrected) {
            s.value = 40.0 + i as f64;
            c.value = Some(30.0 + i as f64);
        }
        line
    };
    let lines = (1..=9).flat_map(|i| [particle(i, "height"), particle(i, "diameter")]);
    let mut outcome = invented::outcome();
    outcome.dimensions = Some(Arc::new(lines.collect()));
    let mut window = window_on(outcome, vec![Request::new("particles", Kind::Particle)]);
    click(&mut window, "Dimensions, done");
    click(&mut window, "particles · particles");
    let said = image(&window, "Histogram of diameters").unwrap();
    assert!(
        said.contains("as scanned") && said.contains("corrected"),
        "{said}"
    );
    assert!(image(&window, "Histogram of heights").is_some());
    window.check_accessibility();
}

/// A window with a worker on one of the samples.
fn on_sample(name: &str) -> Window {
    let path = std::path::Path::new(env!("CARGO_MANIFEST_DIR"))
        .join("sample-scans")
        .join(name);
    open(Theme::Dark, move |ctx| {
        let job: Job = Job::open(&path).unwrap();
        App::new(ctx, Start::InMemory(Box::new(job)), None)
    })
}

#[test]
fn a_gauge_shows_both_ways_and_its_certificate() {
    let mut window = on_sample("gauge-5.toml");
    wait(&mut window, |app| app.shown.tip.is_some() && !app.running());
    window
        .state_mut()
        .as_mut()
        .unwrap()
        .execute(Command::Go(Stage::Tip));
    window.run_steps(4);
    for text in [
        "Both ways",
        "Model fit, used",
        "Free form",
        "One u of the certificate moves",
    ] {
        assert!(window.query_by_label(text).is_some(), "{text}");
    }
    assert!(
        window.query_by_label("Threshold").is_none(),
        "that is of blind tips"
    );
    window.check_accessibility();
}

#[test]
fn draws_are_under_way_beside_the_results_and_can_be_stopped() {
    let mut window = on_sample("stamp-14.toml");
    wait(&mut window, |app| {
        app.shown.dimensions.is_some() && !app.running()
    });
    let before = app(&window).shown.dimensions.clone().unwrap();
    let state = window.state_mut().as_mut().unwrap();
    let mut job = Box::new(state.opened.as_ref().unwrap().history.now().clone());
    job.monte_carlo = Some(crate::job::MonteCarloSpec::new(1_000_000));
    state.execute(Command::Edit {
        job,
        gesture: false,
    });
    wait(&mut window, |app| {
        let work = app.worker.as_ref().unwrap().under_way();
        work.is_some_and(|p| p.label() == "drawing the whole chain" && p.fraction() > 0.0)
    });
    assert!(app(&window).shown.dimensions.is_some());
    click(&mut window, "Stop");
    wait(&mut window, |app| !app.running());
    let after = app(&window).shown.dimensions.clone().unwrap();
    assert_eq!(*before, *after);
}
