//! What the reader refuses: each with its code, the element named, and its line. The texts are invented.

use underfoot::model::{Fault, JointSpec, ModelError, ModelOptions, SoleSpec, Subject, TorqueSpeedLine, read_urdf};
use underfoot::spatial::polygon::SoleShape;
use underfoot::spatial::{Mat3, Pose, Vec3};

const MASS: &str = r#"<inertial><mass value="1"/><inertia ixx="1" ixy="0" ixz="0" iyy="1" iyz="0" izz="1"/></inertial>"#;
const LIMIT: &str = r#"<limit lower="-1" upper="1" effort="10" velocity="10"/>"#;

/// One robot a row: `$` in a line stands for a good inertial, `%` for a good limit.
fn robot(lines: &str) -> String {
    format!("<robot name=\"r\">\n{}\n</robot>", lines.replace('$', MASS).replace('%', LIMIT))
}

fn refused(xml: &str, options: &ModelOptions) -> ModelError {
    match read_urdf(xml, options) {
        Ok(model) => panic!("accepted: {model:?}\n{xml}"),
        Err(error) => error,
    }
}

/// Code, element, line of the refusal (the `<robot>` tag is line 1), lines of the description.
type Row = (&'static str, &'static str, usize, &'static str);

fn check(rows: &[Row]) {
    for (code, element, line, lines) in rows {
        let error = refused(&robot(lines), &ModelOptions::default());
        assert_eq!(error.code(), *code, "{error}\n{lines}");
        assert_eq!(error.element, *element, "{error}\n{lines}");
        match error.subject {
            Subject::Urdf { line: got, .. } => assert_eq!(got, *line, "{error}\n{lines}"),
            other => panic!("{other:?}: {error}"),
        }
        let text = error.to_string();
        assert!(text.contains(element) && text.contains(&format!("line {line},")), "{text}");
    }
}

#[test]
fn structure() {
    check(&[
        ("no-links", "robot description", 1, ""),
        ("duplicate-name", "link \"a\"", 4, "<link name=\"a\">$</link>\n\n<link name=\"a\"/>"),
        ("duplicate-name", "joint \"j\"", 6,
         "<link name=\"a\">$</link>\n<link name=\"b\">$</link>\n<link name=\"c\">$</link>\n<joint name=\"j\" type=\"fixed\"><parent link=\"a\"/><child link=\"b\"/></joint>\n<joint name=\"j\" type=\"fixed\"><parent link=\"a\"/><child link=\"c\"/></joint>"),
        ("unknown-name", "joint \"j\"", 4, "<link name=\"a\">$</link>\n<joint name=\"j\" type=\"fixed\">\n<parent link=\"ghost\"/><child link=\"a\"/></joint>"),
        ("unknown-name", "joint \"j\"", 5, "<link name=\"a\">$</link>\n<joint name=\"j\" type=\"fixed\">\n<parent link=\"a\"/>\n<child link=\"ghost\"/></joint>"),
        ("several-roots", "link \"b\"", 3, "<link name=\"a\">$</link>\n<link name=\"b\">$</link>"),
        // Two parents.
        ("kinematic-loop", "joint \"k\"", 6,
         "<link name=\"a\">$</link>\n<link name=\"b\">$</link>\n<link name=\"c\">$</link>\n<joint name=\"j\" type=\"fixed\"><parent link=\"a\"/><child link=\"c\"/></joint>\n<joint name=\"k\" type=\"fixed\"><parent link=\"b\"/><child link=\"c\"/></joint>"),
        // A child that is its own ancestor, without any root.
        ("kinematic-loop", "joint \"k\"", 5,
         "<link name=\"a\">$</link>\n<link name=\"b\">$</link>\n<joint name=\"j\" type=\"fixed\"><parent link=\"a\"/><child link=\"b\"/></joint>\n<joint name=\"k\" type=\"fixed\"><parent link=\"b\"/><child link=\"a\"/></joint>"),
        // The same beside a good root.
        ("kinematic-loop", "joint \"k\"", 6,
         "<link name=\"root\">$</link>\n<link name=\"a\">$</link>\n<link name=\"b\">$</link>\n<joint name=\"j\" type=\"fixed\"><parent link=\"a\"/><child link=\"b\"/></joint>\n<joint name=\"k\" type=\"fixed\"><parent link=\"b\"/><child link=\"a\"/></joint>"),
        ("kinematic-loop", "joint \"j\"", 3, "<link name=\"a\">$</link>\n<joint name=\"j\" type=\"fixed\"><parent link=\"a\"/><child link=\"a\"/></joint>"),
    ]);
}

/// A robot of two links whose only joint is given.
fn two_links(joint: &str) -> String {
    robot(&format!("<link name=\"a\">$</link>\n<link name=\"b\">$</link>\n{joint}"))
}

#[test]
fn joints() {
    let ends = "<parent link=\"a\"/><child link=\"b\"/>";
    // Code, line, joint element from line 4 on.
    let rows = [
        ("unknown-joint-type", 4, format!("<joint name=\"j\" type=\"hinge\">{ends}%</joint>")),
        ("planar-joint", 4, format!("<joint name=\"j\" type=\"planar\">{ends}</joint>")),
        // The root has mass.
        ("floating-joint", 4, format!("<joint name=\"j\" type=\"floating\">{ends}</joint>")),
        ("mimic-not-locked", 5, format!("<joint name=\"j\" type=\"revolute\">{ends}%\n<mimic joint=\"other\" multiplier=\"2\"/></joint>")),
        ("urdf-missing-attribute", 4, format!("<joint name=\"j\">{ends}%</joint>")),
        ("urdf-missing-element", 4, "<joint name=\"j\" type=\"fixed\"><child link=\"b\"/></joint>".to_string()),
        ("urdf-missing-element", 4, "<joint name=\"j\" type=\"fixed\"><parent link=\"a\"/></joint>".to_string()),
        ("urdf-missing-element", 4, format!("<joint name=\"j\" type=\"revolute\">{ends}</joint>")),
        ("urdf-missing-element", 4, format!("<joint name=\"j\" type=\"prismatic\">{ends}</joint>")),
        ("urdf-missing-attribute", 5, format!("<joint name=\"j\" type=\"revolute\">{ends}\n<limit lower=\"-1\" upper=\"1\" velocity=\"1\"/></joint>")),
        ("urdf-missing-attribute", 5, format!("<joint name=\"j\" type=\"continuous\">{ends}\n<limit effort=\"1\"/></joint>")),
        ("urdf-missing-attribute", 4, "<joint name=\"j\" type=\"fixed\"><parent/><child link=\"b\"/></joint>".to_string()),
        ("urdf-repeated-element", 5, format!("<joint name=\"j\" type=\"fixed\">{ends}\n<child link=\"b\"/></joint>")),
        ("model-bad-value", 5, format!("<joint name=\"j\" type=\"revolute\">{ends}%\n<axis xyz=\"0 0 0\"/></joint>")),
        ("model-bad-value", 5, format!("<joint name=\"j\" type=\"revolute\">{ends}%\n<axis xyz=\"0 1\"/></joint>")),
        ("model-bad-value", 5, format!("<joint name=\"j\" type=\"revolute\">{ends}%\n<axis xyz=\"0 1 0 0\"/></joint>")),
        ("model-bad-value", 5, format!("<joint name=\"j\" type=\"revolute\">{ends}%\n<axis xyz=\"0 one 0\"/></joint>")),
        ("model-bad-value", 5, format!("<joint name=\"j\" type=\"fixed\">{ends}\n<origin xyz=\"nan 0 0\"/></joint>")),
        ("model-bad-value", 5, format!("<joint name=\"j\" type=\"fixed\">{ends}\n<origin rpy=\"0 inf 0\"/></joint>")),
        ("model-bad-value", 5, format!("<joint name=\"j\" type=\"fixed\">{ends}\n<origin xyz=\"0 0 1e999\"/></joint>")),
        ("model-bad-value", 5, format!("<joint name=\"j\" type=\"fixed\">{ends}\n<origin xyz=\"0 0 1e200\"/></joint>")),
        ("model-bad-value", 5, format!("<joint name=\"j\" type=\"revolute\">{ends}\n<limit lower=\"1\" upper=\"-1\" effort=\"1\" velocity=\"1\"/></joint>")),
        ("model-bad-value", 5, format!("<joint name=\"j\" type=\"revolute\">{ends}\n<limit lower=\"-1\" upper=\"1\" effort=\"-1\" velocity=\"1\"/></joint>")),
        ("model-bad-value", 5, format!("<joint name=\"j\" type=\"revolute\">{ends}\n<limit lower=\"-1\" upper=\"1\" effort=\"1\" velocity=\"-1\"/></joint>")),
        ("model-bad-value", 5, format!("<joint name=\"j\" type=\"revolute\">{ends}%\n<dynamics damping=\"-0.1\"/></joint>")),
    ];
    for (code, line, joint) in rows {
        let error = refused(&two_links(&joint), &ModelOptions::default());
        assert_eq!(error.code(), code, "{error}\n{joint}");
        assert_eq!(error.element, "joint \"j\"", "{error}");
        assert!(matches!(error.subject, Subject::Urdf { line: l, .. } if l == line), "{error}\n{joint}");
    }
    let nameless = two_links(&format!("<joint type=\"fixed\">{ends}</joint>"));
    let error = refused(&nameless, &ModelOptions::default());
    assert_eq!(error.code(), "urdf-missing-attribute");
    assert!(matches!(error.subject, Subject::Urdf { line: 4, column: 1 }), "{error}");
}

#[test]
fn non_physical_inertia() {
    // mass, ixx ixy ixz iyy iyz izz
    let rows = [
        ("-1", "1 0 0 1 0 1"),
        ("0", "1 0 0 1 0 1"),
        ("1", "0 0 0 0 0 0"),
        // Not positive definite: a negative moment; a rod without thickness; large products.
        ("1", "-1 0 0 1 0 1"),
        ("1", "1 0 0 1 0 0"),
        ("1", "1 2 0 1 0 1"),
        // One moment larger than the other two together, plainly and by little.
        ("1", "1 0 0 1 0 3"),
        ("1", "1 0 0 1 0 2.001"),
        // Derived: with ixx = iyy = 1, ixy = -0.9 the principal moments are 0.1, 1.9 and izz, and
        // 0.1 + 1.7 < 1.9.
        ("1", "1 -0.9 0 1 0 1.7"),
    ];
    for (mass, moments) in rows {
        let m: Vec<&str> = moments.split(' ').collect();
        let xml = robot(&format!(
            "<link name=\"a\"><inertial>\n<mass value=\"{mass}\"/><inertia ixx=\"{}\" ixy=\"{}\" ixz=\"{}\" iyy=\"{}\" iyz=\"{}\" izz=\"{}\"/></inertial></link>",
            m[0], m[1], m[2], m[3], m[4], m[5]
        ));
        let error = refused(&xml, &ModelOptions::default());
        assert_eq!(error.code(), "non-physical-inertia", "{error}");
        assert_eq!(error.element, "link \"a\"");
        assert!(matches!(error.subject, Subject::Urdf { line: 3, .. }), "{error}");
        assert!(error.to_string().contains("expected"), "{error}");
    }
    // A flat plate sits on the bound exactly, and six digits may round it across.
    for izz in ["2", "2.00001", "1.99999"] {
        let xml = robot(&format!(
            "<link name=\"a\"><inertial><mass value=\"1\"/><inertia ixx=\"1\" ixy=\"0\" ixz=\"0\" iyy=\"1\" iyz=\"0\" izz=\"{izz}\"/></inertial></link>"
        ));
        assert!(read_urdf(&xml, &ModelOptions::default()).is_ok(), "{izz}");
    }
    check(&[
        ("model-bad-value", "link \"a\"", 2, "<link name=\"a\"><inertial><mass value=\"heavy\"/><inertia ixx=\"1\" ixy=\"0\" ixz=\"0\" iyy=\"1\" iyz=\"0\" izz=\"1\"/></inertial></link>"),
        ("urdf-missing-attribute", "link \"a\"", 2, "<link name=\"a\"><inertial><mass value=\"1\"/><inertia ixx=\"1\" iyy=\"1\" izz=\"1\"/></inertial></link>"),
        ("urdf-missing-element", "link \"a\"", 2, "<link name=\"a\"><inertial><mass value=\"1\"/></inertial></link>"),
        ("urdf-missing-element", "link \"a\"", 2, "<link name=\"a\"><inertial><inertia ixx=\"1\" ixy=\"0\" ixz=\"0\" iyy=\"1\" iyz=\"0\" izz=\"1\"/></inertial></link>"),
    ]);
}

#[test]
fn singular_joints() {
    check(&[
        // A weightless hand on a moving joint.
        ("singular-inertia", "joint \"j\"", 4, "<link name=\"a\">$</link>\n<link name=\"b\"/>\n<joint name=\"j\" type=\"continuous\"><parent link=\"a\"/><child link=\"b\"/></joint>"),
        // Two joints about one line with nothing between them: the first has nothing to turn.
        ("singular-inertia", "joint \"j\"", 5,
         "<link name=\"a\">$</link>\n<link name=\"b\"/>\n<link name=\"c\">$</link>\n<joint name=\"j\" type=\"continuous\"><parent link=\"a\"/><child link=\"b\"/></joint>\n<joint name=\"k\" type=\"continuous\"><parent link=\"b\"/><child link=\"c\"/></joint>"),
        // A weightless floating base.
        ("singular-inertia", "link \"a\"", 2, "<link name=\"a\"/>\n<link name=\"b\">$</link>\n<joint name=\"j\" type=\"continuous\"><parent link=\"a\"/><child link=\"b\"/></joint>"),
        ("singular-inertia", "link \"a\"", 2, "<link name=\"a\"/>"),
    ]);
    // Three crossing axes without links of weight between them are a good ball joint.
    let ball = robot(
        "<link name=\"a\">$</link><link name=\"x\"/><link name=\"y\"/><link name=\"b\">$</link>
         <joint name=\"i\" type=\"continuous\"><parent link=\"a\"/><child link=\"x\"/><axis xyz=\"1 0 0\"/></joint>
         <joint name=\"j\" type=\"continuous\"><parent link=\"x\"/><child link=\"y\"/><axis xyz=\"0 1 0\"/></joint>
         <joint name=\"k\" type=\"continuous\"><parent link=\"y\"/><child link=\"b\"/><axis xyz=\"0 0 1\"/></joint>",
    );
    assert!(read_urdf(&ball, &ModelOptions::default()).is_ok());
    // A rotor is inertia enough, and so is a lock.
    let hand = robot("<link name=\"a\">$</link>\n<link name=\"b\"/>\n<joint name=\"j\" type=\"continuous\"><parent link=\"a\"/><child link=\"b\"/></joint>");
    for spec in [
        JointSpec { rotor_inertia: Some(1e-6), ..JointSpec::named("j") },
        JointSpec { locked_at: Some(0.0), ..JointSpec::named("j") },
    ] {
        let options = ModelOptions { joints: vec![spec], ..ModelOptions::default() };
        assert!(read_urdf(&hand, &options).is_ok());
    }
    let fixed = ModelOptions { fixed_base: true, ..ModelOptions::default() };
    let error = refused(&robot("<link name=\"a\">$</link>"), &fixed);
    assert_eq!(error.code(), "nothing-moves");
}

#[test]
fn floating_joints() {
    let floating = "<joint name=\"f\" type=\"floating\"><parent link=\"world\"/><child link=\"a\"/></joint>";
    check(&[
        // Not at the root.
        ("floating-joint", "joint \"f\"", 6,
         "<link name=\"top\">$</link>\n<link name=\"world\">$</link>\n<link name=\"a\">$</link>\n<joint name=\"j\" type=\"fixed\"><parent link=\"top\"/><child link=\"world\"/></joint>\n<joint name=\"f\" type=\"floating\"><parent link=\"world\"/><child link=\"a\"/></joint>"),
        // Not alone.
        ("floating-joint", "joint \"f\"", 5,
         "<link name=\"world\"/>\n<link name=\"a\">$</link>\n<link name=\"b\">$</link>\n<joint name=\"f\" type=\"floating\"><parent link=\"world\"/><child link=\"a\"/></joint>\n<joint name=\"j\" type=\"fixed\"><parent link=\"world\"/><child link=\"b\"/></joint>"),
    ]);
    let good = robot(&format!("<link name=\"world\"/>\n<link name=\"a\">$</link>\n{floating}"));
    let model = read_urdf(&good, &ModelOptions::default()).expect("a massless root is dropped");
    assert_eq!(model.bodies.len(), 1);
    // Locked, it is a weld like any other.
    let locked = JointSpec { locked_at: Some(0.0), ..JointSpec::named("f") };
    let options = ModelOptions { joints: vec![locked], ..ModelOptions::default() };
    let welded = read_urdf(&good, &options).expect("a weld");
    assert_eq!((welded.bodies.len(), welded.frames.len()), (1, 2));
    assert_eq!(model.frames.iter().map(|f| f.name.as_str()).collect::<Vec<_>>(), ["a"]);
    assert!(model.remarks.iter().any(|r| r.contains("\"world\"")), "{:?}", model.remarks);
}

#[test]
fn options() {
    let xml = two_links("<joint name=\"j\" type=\"revolute\"><parent link=\"a\"/><child link=\"b\"/>%</joint>\n<link name=\"c\"/>\n<joint name=\"w\" type=\"fixed\"><parent link=\"a\"/><child link=\"c\"/></joint>\n<link name=\"d\"/>\n<joint name=\"p\" type=\"planar\"><parent link=\"a\"/><child link=\"d\"/></joint>");
    let planar = JointSpec { locked_at: Some(0.0), ..JointSpec::named("p") };
    let j = || JointSpec::named("j");
    let line = |stall, no_load_speed| Some(TorqueSpeedLine { stall, no_load_speed });
    let joints = [
        ("unknown-name", JointSpec::named("ghost")),
        ("duplicate-name", planar.clone()),
        ("model-bad-value", JointSpec { rotor_inertia: Some(-1.0), ..j() }),
        ("model-bad-value", JointSpec { viscous_friction: Some(f64::NAN), ..j() }),
        ("model-bad-value", JointSpec { coulomb_friction: Some(f64::INFINITY), ..j() }),
        ("model-bad-value", JointSpec { torque_speed: line(0.0, 1.0), ..j() }),
        ("model-bad-value", JointSpec { torque_speed: line(1.0, f64::NAN), ..j() }),
        ("model-bad-value", JointSpec { position: Some((1.0, 0.0)), ..j() }),
        ("model-bad-value", JointSpec { position: Some((f64::NAN, 0.0)), ..j() }),
        ("model-bad-value", JointSpec { speed: Some(0.0), ..j() }),
        ("model-bad-value", JointSpec { effort: Some(-3.0), ..j() }),
        ("model-bad-value", JointSpec { locked_at: Some(f64::NAN), ..j() }),
        ("model-bad-value", JointSpec { locked_at: Some(0.1), ..JointSpec::named("w") }),
        ("joint-does-not-move", JointSpec { effort: Some(3.0), ..JointSpec::named("w") }),
    ];
    for (code, spec) in joints {
        let element = format!("joint {:?}", spec.name);
        let options = ModelOptions { joints: vec![planar.clone(), spec], ..ModelOptions::default() };
        let error = refused(&xml, &options);
        assert_eq!((error.code(), error.subject), (code, Subject::Joint(1)), "{error}");
        assert_eq!(error.element, element);
        assert_eq!(error.member().is_some(), code != "joint-does-not-move");
    }
    let stall = JointSpec { torque_speed: line(-1.0, 1.0), ..j() };
    let error = refused(&xml, &ModelOptions { joints: vec![stall], ..ModelOptions::default() });
    assert_eq!(error.member(), Some("torque_speed.stall"));
    let sole = |name: &str, link: &str, placement| SoleSpec {
        name: name.to_string(),
        link: link.to_string(),
        placement,
        shape: SoleShape::Point,
    };
    let here = Pose::identity();
    let turned = Pose { rotation: Mat3::identity() * 2.0, ..here };
    let mirrored = Pose { rotation: -Mat3::identity(), ..here };
    let away = Pose { translation: Vec3::new(0.0, f64::NAN, 0.0), ..here };
    for (code, second) in [
        ("unknown-name", sole("s", "ghost", here)),
        ("duplicate-name", sole("first", "b", here)),
        ("model-bad-value", sole(" ", "b", here)),
        ("model-bad-value", sole("s", "b", turned)),
        ("model-bad-value", sole("s", "b", mirrored)),
        ("model-bad-value", sole("s", "b", away)),
    ] {
        let soles = vec![sole("first", "b", here), second];
        let options = ModelOptions { soles, joints: vec![planar.clone()], ..ModelOptions::default() };
        let error = refused(&xml, &options);
        assert_eq!((error.code(), error.subject), (code, Subject::Sole(1)), "{error}");
    }
}

#[test]
fn hostile_text() {
    let code = |xml: &str| refused(xml, &ModelOptions::default());
    let deep = format!("<robot name=\"r\">{}{}</robot>", "<a>".repeat(100_000), "</a>".repeat(100_000));
    assert_eq!(code(&deep).code(), "model-too-large");
    assert_eq!(code(&"<a>".repeat(100_000)).code(), "model-too-large");
    let laughs = "<?xml version=\"1.0\"?>\n<!DOCTYPE lolz [<!ENTITY a \"ha\"><!ENTITY b \"&a;&a;&a;&a;\">]>\n<robot name=\"r\">&b;</robot>";
    let error = code(laughs);
    assert_eq!(error.fault, Fault::DocumentType);
    assert!(matches!(error.subject, Subject::Urdf { line: 2, .. }), "{error}");
    let names: String = (0..100_000).map(|i| format!(" a{i}=\"\"")).collect();
    assert_eq!(code(&format!("<robot name=\"r\"{names}/>")).code(), "model-too-large");
    let spaces: String = (0..2_000).map(|i| format!("<a xmlns:n{i}=\"u{i}\"/>")).collect();
    assert_eq!(code(&format!("<robot name=\"r\">{spaces}</robot>")).code(), "model-too-large");
    let many = format!("<robot name=\"r\">{}</robot>", "<a/>".repeat(300_000));
    assert_eq!(code(&many).code(), "model-too-large");
    let links: String = (0..5_000).map(|i| format!("<link name=\"l{i}\"/>")).collect();
    assert_eq!(code(&format!("<robot name=\"r\">{links}</robot>")).code(), "model-too-large");
    assert_eq!(code(&" ".repeat(5 << 20)).code(), "model-too-large");
    // A huge attribute: refused, and not repeated in full.
    let huge = format!("<robot name=\"r\"><link name=\"{}\"/></robot>", "x".repeat(1 << 20));
    let error = code(&huge);
    assert_eq!(error.code(), "model-bad-value");
    assert!(error.to_string().len() < 500);
    for text in ["", "   ", "<", "<robot", "<robot name=\"r\">", "<robot name=\"r\"></rob>", "{}", "<robot name=\"&x;\"/>", "\u{0}", "<robot name='r'/><robot name='s'/>"] {
        assert_eq!(code(text).code(), "urdf-not-well-formed", "{text:?}");
    }
    assert_eq!(code("<machine name=\"r\"/>").code(), "urdf-not-a-robot");
    assert_eq!(code("<robot/>").code(), "urdf-missing-attribute");
    // Megabytes on one line: finding places must not walk the line each time.
    let pad = "x".repeat(200);
    let links: String = (0..4_000).map(|i| format!("<link name=\"l{i}\"><visual n=\"{pad}{pad}{pad}{pad}\"/></link>")).collect();
    assert_eq!(code(&format!("<robot name=\"r\">{links}</robot>")).code(), "several-roots");
    // 300 links in a chain of moving joints: more than the matrices are meant for.
    let mut chain = "<robot name=\"r\"><link name=\"l0\"/>".to_string();
    for i in 1..300 {
        chain += &format!("<link name=\"l{i}\">{MASS}</link><joint name=\"j{i}\" type=\"continuous\"><parent link=\"l{}\"/><child link=\"l{i}\"/></joint>", i - 1);
    }
    assert_eq!(code(&(chain + "</robot>")).code(), "model-too-large");
}
