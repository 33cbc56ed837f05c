//! Holds the direction of imports: field -> io; field -> numerics -> extract -> analysis -> figure, report -> cli.

use std::fs;
use std::path::{Path, PathBuf};

/// Layer and the layers it may import; one line a folder or file directly under `src`.
const ALLOWED: &[(&str, &[&str])] = &[
    ("field", &[]),
    ("io", &["field"]),
    ("numerics", &["field"]),
    ("extract", &["field", "numerics"]),
    ("analysis", &["field", "numerics", "extract"]),
    ("figure", &["field", "extract", "analysis"]),
    ("report", &["field", "numerics", "extract", "analysis", "io"]),
];

fn rust_files(folder: &Path, out: &mut Vec<PathBuf>) {
    for entry in fs::read_dir(folder).expect("src can be listed") {
        let path = entry.expect("entry can be read").path();
        if path.is_dir() {
            rust_files(&path, out);
        } else if path.extension().is_some_and(|e| e == "rs") {
            out.push(path);
        }
    }
}

/// Layer a source file belongs to: the first component under `src`.
fn layer_of(path: &Path, src: &Path) -> String {
    let inside = path.strip_prefix(src).expect("a file under src");
    let first = inside.components().next().expect("a name").as_os_str().to_string_lossy().into_owned();
    first.trim_end_matches(".rs").to_owned()
}

/// Layers named in `crate::NAME` paths, comments left out; `use crate::{a::.., b::..}` is read too.
fn imported(text: &str) -> Vec<String> {
    let mut found = Vec::new();
    let code: String = text.lines().filter(|line| !line.trim_start().starts_with("//")).collect::<Vec<_>>().join("\n");
    for (at, _) in code.match_indices("crate::") {
        if at > 0 && code[..at].ends_with('$') {
            continue;
        }
        let rest = &code[at + "crate::".len()..];
        let name =
            |s: &str| s.trim_start().chars().take_while(|c| c.is_alphanumeric() || *c == '_').collect::<String>();
        if let Some(inner) = rest.strip_prefix('{') {
            let mut depth = 1;
            let mut piece = String::new();
            for c in inner.chars() {
                match c {
                    '{' => depth += 1,
                    '}' => depth -= 1,
                    _ => {}
                }
                if depth == 0 || (depth == 1 && c == ',') {
                    found.push(name(&piece));
                    piece.clear();
                } else {
                    piece.push(c);
                }
                if depth == 0 {
                    break;
                }
            }
        } else {
            found.push(name(rest));
        }
    }
    found.retain(|layer| !layer.is_empty());
    found
}

#[test]
fn imports_follow_the_layer_table() {
    let src = Path::new(env!("CARGO_MANIFEST_DIR")).join("src");
    let mut files = Vec::new();
    rust_files(&src, &mut files);
    let (mut checked, mut wrong) = (0, Vec::new());
    for path in files {
        let layer = layer_of(&path, &src);
        if matches!(layer.as_str(), "lib" | "main" | "cli") {
            continue;
        }
        let Some((_, allowed)) = ALLOWED.iter().find(|(name, _)| *name == layer) else {
            wrong.push(format!("{} is in no layer of the table", path.display()));
            continue;
        };
        for import in imported(&fs::read_to_string(&path).expect("a text file")) {
            checked += 1;
            if import != layer && !allowed.contains(&import.as_str()) {
                wrong.push(format!("{} imports `{import}`, layer `{layer}` may not", path.display()));
            }
        }
    }
    assert!(checked > 20, "only {checked} imports seen: the reader of this test is broken");
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
}

#[test]
fn every_folder_states_its_role_and_imports_in_its_first_line() {
    let src = Path::new(env!("CARGO_MANIFEST_DIR")).join("src");
    for layer in ["field", "io", "numerics", "extract", "figure", "report", "cli"] {
        let text = fs::read_to_string(src.join(layer).join("mod.rs")).expect("every layer has a mod.rs");
        let first = text.lines().next().unwrap_or_default();
        assert!(first.starts_with("//! Layer"), "{layer}: {first}");
        assert!(first.contains("May use:") || text.lines().nth(1).unwrap_or_default().contains("May use:"), "{layer}");
    }
}

#[test]
fn the_reader_of_imports_sees_plain_and_grouped_paths_and_skips_comments() {
    let text = "use crate::field::Grid;\n// crate::io::x\nuse crate::{\n    numerics::{a, b},\n    extract,\n};\nlet x = crate::io::y();";
    assert_eq!(imported(text), ["field", "numerics", "extract", "io"]);
}
