//! The reader answers anything, and never panics: arbitrary text, and good robots with damage.

#[path = "common/random_tree.rs"]
mod random_tree;

use proptest::prelude::*;
use underfoot::model::{ModelOptions, Subject, read_urdf};

const BIPED7: &str = include_str!("data/biped7.urdf");

/// Pieces that make text look like a URDF.
const PIECES: [&str; 32] = [
    "<robot name=\"r\">", "</robot>", "<link name=\"a\">", "<link name=\"b\"/>", "</link>", "<joint name=\"j\" type=\"revolute\">",
    "<joint name=\"k\" type=\"floating\">", "</joint>", "<parent link=\"a\"/>", "<child link=\"b\"/>", "<child link=\"a\"/>",
    "<inertial>", "</inertial>", "<mass value=\"1\"/>", "<mass value=\"-1e308\"/>",
    "<inertia ixx=\"1\" ixy=\"0\" ixz=\"0\" iyy=\"1\" iyz=\"0\" izz=\"1\"/>", "<limit effort=\"1\" velocity=\"1\"/>",
    "<origin xyz=\"1 2 3\" rpy=\"1e9 0 -1e9\"/>", "<axis xyz=\"1e-300 0 0\"/>", "<mimic joint=\"j\"/>", "<!-- ", " -->", "<![CDATA[", "]]>",
    "<?xml version=\"1.0\"?>", "&amp;", "&x;", "<!DOCTYPE r>", "\u{e9}\u{1f9b6}", "\n", " xmlns=\"u\"", "<",
];

const NUMBERS: [&str; 12] =
    ["0", "-0", "1e9", "-1e9", "1e308", "1e-320", "nan", "inf", "", "1 2", "5e-324", "0.1"];

/// Either a model, or an error whose place lies in the text and whose message is short.
fn answers(text: &str) {
    if let Err(error) = read_urdf(text, &ModelOptions::default()) {
        assert!(error.to_string().len() < 3000, "{error}");
        match error.subject {
            Subject::Urdf { line, column } => {
                assert!(line >= 1 && column >= 1 && line <= text.matches('\n').count() + 1, "{error}\n{text}");
            }
            other => panic!("{other:?}"),
        }
    }
}

proptest! {
    #![proptest_config(ProptestConfig { cases: 512, ..ProptestConfig::default() })]

    #[test]
    fn any_bytes(bytes in proptest::collection::vec(any::<u8>(), 0..400)) {
        answers(&String::from_utf8_lossy(&bytes));
    }

    #[test]
    fn any_pieces(picks in proptest::collection::vec(0..PIECES.len(), 0..60)) {
        let text: String = picks.iter().map(|i| PIECES[*i]).collect();
        answers(&text);
        answers(&format!("<robot name=\"r\">{text}</robot>"));
    }

    #[test]
    fn damaged_robots(seed in any::<u64>(), joints in 1usize..12, cuts in 1usize..4) {
        let mut rng = random_tree::Rng(seed);
        let mut text = if rng.below(2) == 0 { BIPED7.to_string() } else { random_tree::random_urdf(seed, joints) };
        for _ in 0..cuts {
            damage(&mut rng, &mut text);
        }
        answers(&text);
    }
}

/// Cuts a piece out, doubles it, puts in a wild character, or gives an attribute a wild number.
fn damage(rng: &mut random_tree::Rng, text: &mut String) {
    let boundary = |text: &str, mut at: usize| {
        while !text.is_char_boundary(at) {
            at -= 1;
        }
        at
    };
    let start = boundary(text, rng.below(text.len() + 1));
    let end = boundary(text, (start + rng.below(60)).min(text.len())).max(start);
    match rng.below(4) {
        0 => text.replace_range(start..end, ""),
        1 => {
            let piece = text[start..end].to_string();
            text.insert_str(start, &piece);
        }
        2 => text.insert(start, ['<', '>', '"', '&', '\u{0}', '\u{e9}', '/'][rng.below(7)]),
        _ => {
            let quotes: Vec<usize> = text.match_indices('"').map(|(i, _)| i).collect();
            if quotes.len() >= 2 {
                let pair = 2 * rng.below(quotes.len() / 2);
                text.replace_range(quotes[pair] + 1..quotes[pair + 1], NUMBERS[rng.below(NUMBERS.len())]);
            }
        }
    }
}
