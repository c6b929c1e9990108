//! The canonical form of JSON, RFC 8785, against the RFC's own examples (published, quoted from
//! memory), and the fingerprint that rests on it.

use underfoot::wire::{canonical, fingerprint};

fn canonical_text(text: &str) -> String {
    canonical(text.as_bytes()).unwrap_or_else(|| panic!("no canonical form of {text}"))
}

/// Section 3.2.2: the sample with its serialisation of primitive data and its sorted form of
/// section 3.2.3 (published, quoted from memory).
#[test]
fn the_sample_of_sections_3_2_2_and_3_2_3() {
    let sample = r#"{
        "numbers": [333333333.33333329, 1E30, 4.50, 2e-3, 0.000000000000000000000000001],
        "string": "\u20ac$\u000F\u000aA'\u0042\u0022\u005c\\\"\/",
        "literals": [null, true, false]
    }"#;
    let expected = concat!(
        r#"{"literals":[null,true,false],"numbers":[333333333.3333333,1e+30,4.5,0.002,1e-27],"#,
        "\"string\":\"\u{20ac}$\\u000f\\nA'B\\\"\\\\\\\\\\\"/\"}",
    );
    assert_eq!(canonical_text(sample), expected);
}

/// Section 3.2.3: property names sorted by UTF-16 code units (published, quoted from memory).
#[test]
fn the_sorting_example_of_section_3_2_3() {
    let sample = r#"{
        "\u20ac": "Euro Sign",
        "\r": "Carriage Return",
        "\ufb33": "Hebrew Letter Dalet With Dagesh",
        "1": "One",
        "\ud83d\ude00": "Emoji: Grinning Face",
        "\u0080": "Control",
        "\u00f6": "Latin Small Letter O With Diaeresis"
    }"#;
    let text = canonical_text(sample);
    let order = [
        "Carriage Return", "One", "Control", "Latin Small Letter O With Diaeresis", "Euro Sign",
        "Emoji: Grinning Face", "Hebrew Letter Dalet With Dagesh",
    ];
    let places: Vec<usize> =
        order.iter().map(|value| text.find(value).unwrap_or_else(|| panic!("no {value}"))).collect();
    assert!(places.is_sorted(), "{text}");
}

/// Appendix B: doubles by their bits and how they are written (published, quoted from memory).
#[test]
fn the_number_samples_of_appendix_b() {
    let samples: [(u64, &str); 21] = [
        (0x0000000000000000, "0"),
        (0x8000000000000000, "0"),
        (0x0000000000000001, "5e-324"),
        (0x8000000000000001, "-5e-324"),
        (0x7fefffffffffffff, "1.7976931348623157e+308"),
        (0xffefffffffffffff, "-1.7976931348623157e+308"),
        (0x4340000000000000, "9007199254740992"),
        (0xc340000000000000, "-9007199254740992"),
        (0x4430000000000000, "295147905179352830000"),
        (0x44b52d02c7e14af5, "9.999999999999997e+22"),
        (0x44b52d02c7e14af6, "1e+23"),
        (0x44b52d02c7e14af7, "1.0000000000000001e+23"),
        (0x444b1ae4d6e2ef4e, "999999999999999700000"),
        (0x444b1ae4d6e2ef4f, "999999999999999900000"),
        (0x444b1ae4d6e2ef50, "1e+21"),
        (0x3eb0c6f7a0b5ed8c, "9.999999999999997e-7"),
        (0x3eb0c6f7a0b5ed8d, "0.000001"),
        (0x41b3de4355555553, "333333333.3333332"),
        (0x41b3de4355555555, "333333333.3333333"),
        (0x41b3de4355555556, "333333333.3333334"),
        (0x43143ff3c1cb0959, "1424953923781206.2"),
    ];
    for (bits, expected) in samples {
        let number = f64::from_bits(bits);
        assert_eq!(canonical_text(&format!("[{number:e}]")), format!("[{expected}]"), "{bits:016x}");
    }
}

/// Derived from what a fingerprint is for.
#[test]
fn fingerprints_follow_the_content_alone() {
    let a = fingerprint(br#"{"tick": {"length": 5e-3, "rule": "explicit"}, "gravity": [0, 0, -9.80]}"#);
    let b = fingerprint(br#"{"gravity":[0.0,-0,-9.8],"tick":{"rule":"explicit","length":0.005}}"#);
    assert_eq!(a, b);
    assert_eq!(a.len(), 64);
    assert!(a.bytes().all(|c| c.is_ascii_hexdigit() && !c.is_ascii_uppercase()));
    let c = fingerprint(br#"{"gravity":[0.0,-0,-9.8],"tick":{"rule":"explicit","length":0.0050000000000000001}}"#);
    assert_eq!(a, c);
    let d = fingerprint(br#"{"gravity":[0.0,-0,-9.8],"tick":{"rule":"explicit","length":0.005000000000000001}}"#);
    assert_ne!(a, d);
    assert_ne!(fingerprint(b"{"), fingerprint(b"["));
}

#[test]
fn the_canonical_form_is_its_own() {
    let text = r#"{"b":[1.5,"x",{"d":null,"c":true}],"a":"\u0007\u007f"}"#;
    let once = canonical_text(text);
    assert_eq!(canonical_text(&once), once);
    assert_eq!(canonical(b"{\"a\":1e999}"), None);
}
