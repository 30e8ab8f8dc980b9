//! House rules that no compiler holds: who may depend on whom, what lies where, how long a file grows, and whether the
//! documents speak of a program that exists. Every rule is a plain function from texts to complaints, and each is also run on
//! a sample that breaks it: a rule that cannot complain is no rule.

#[path = "house_source.rs"]
mod source;

use source::{code_only, code_pieces, fenced, functions, snake_case, variants};
use std::collections::{BTreeMap, BTreeSet};
use std::path::{Path, PathBuf};
use std::process::Command;
use toml::{Table, Value};

/// Longest file, in lines.
const FILE_LINES: usize = 700;
/// Longest function, in lines.
const FUNCTION_LINES: usize = 90;
/// Longest function among the tests: a table of cases is longer than any work.
const TABLE_LINES: usize = 100;

/// What each package may use of the others, in what it ships.
const EDGES: [(&str, &[&str]); 5] = [
    ("tarecup-core", &[]),
    ("tarecup-drivers", &["tarecup-core"]),
    ("tarecup-config", &["tarecup-core", "tarecup-drivers"]),
    ("tarecup", &["tarecup-core", "tarecup-drivers", "tarecup-config", "tarecup-simulators"]),
    ("tarecup-simulators", &[]),
];
/// What the core may use of the world: nothing here reads a clock, a file or the network.
const CORE_MAY_USE: [&str; 5] = ["jiff", "libm", "serde", "statrs", "thiserror"];
/// Folders of the packages, and the one of the tests.
const ROOMS: [&str; 6] = ["core", "drivers", "config", "daemon", "simulators", "tests"];
/// What else lies at the top.
const TOP_FILES: [&str; 5] = ["Cargo.toml", "Cargo.lock", "README.md", "DEVELOPERS.md", "LICENSE"];

fn root() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR")).join("..")
}

fn read(path: &str) -> String {
    std::fs::read_to_string(root().join(path)).unwrap_or_else(|e| panic!("{path}: {e}"))
}

fn manifest(path: &str) -> Table {
    read(path).parse().unwrap_or_else(|e| panic!("{path}: {e}"))
}

fn names_in(folder: &str) -> BTreeSet<String> {
    let entries = std::fs::read_dir(root().join(folder)).unwrap_or_else(|e| panic!("{folder}: {e}"));
    entries.flatten().map(|e| e.file_name().to_string_lossy().into_owned()).collect()
}

/// Every Rust file of the project, by its path from the top.
fn rust_files() -> BTreeMap<String, String> {
    let mut files = BTreeMap::new();
    let mut folders: Vec<String> = ROOMS.map(String::from).to_vec();
    while let Some(folder) = folders.pop() {
        for name in names_in(&folder).into_iter().filter(|n| !n.starts_with('.') && n != "target") {
            let path = format!("{folder}/{name}");
            if root().join(&path).is_dir() {
                folders.push(path);
            } else if path.ends_with(".rs") {
                files.insert(path.clone(), read(&path));
            }
        }
    }
    assert!(files.len() > 50, "the walk found {} files only", files.len());
    files
}

fn complain(rule: &str, complaints: &[String]) {
    assert!(complaints.is_empty(), "{rule}:\n  {}", complaints.join("\n  "));
}

// ---- who may depend on whom ---------------------------------------------------------------------------------------

/// The true names of the packages in a table of dependencies, whatever they are called there.
fn dependencies(table: Option<&Value>, workspace: &Table) -> Vec<String> {
    let Some(table) = table.and_then(Value::as_table) else { return Vec::new() };
    let shared = |name: &str| workspace.get("workspace")?.get("dependencies")?.get(name)?.get("package")?.as_str();
    let true_name = |(key, value): (&String, &Value)| {
        let own = value.get("package").and_then(Value::as_str);
        own.or_else(|| shared(key)).unwrap_or(key).to_string()
    };
    table.iter().map(true_name).collect()
}

/// Edges of one manifest that are not permitted.
fn wrong_edges(text: &Table, workspace: &Table) -> Vec<String> {
    let name = text.get("package").and_then(|p| p.get("name")).and_then(Value::as_str).unwrap_or("(no name)");
    let Some((_, allowed)) = EDGES.iter().find(|(n, _)| *n == name) else {
        return vec![format!("{name} is no package of this house")];
    };
    let mut complaints = Vec::new();
    let mut tables: Vec<(String, &Table)> = vec![(String::new(), text)];
    for (target, table) in text.get("target").and_then(Value::as_table).into_iter().flatten() {
        tables.extend(table.as_table().map(|t| (format!(" for {target}"), t)));
    }
    for (place, table) in tables {
        for kind in ["dependencies", "build-dependencies", "dev-dependencies"] {
            // Tests may play instruments at what they try; a simulator stays alone even in its tests.
            let tests_may = kind == "dev-dependencies" && name != "tarecup-simulators";
            for used in dependencies(table.get(kind), workspace) {
                let ours = EDGES.iter().any(|(n, _)| *n == used);
                let may = allowed.contains(&used.as_str()) || (tests_may && used == "tarecup-simulators");
                if ours && !may {
                    complaints.push(format!("{name} may not use {used} ({kind}{place})"));
                }
                if name == "tarecup-core" && !ours && kind != "dev-dependencies" && !CORE_MAY_USE.contains(&used.as_str()) {
                    complaints.push(format!("the core may not use {used} ({kind}{place})"));
                }
            }
        }
    }
    complaints
}

#[test]
fn packages_depend_on_each_other_in_one_direction() {
    let workspace = manifest("Cargo.toml");
    let members = workspace["workspace"]["members"].as_array().expect("members");
    let members: BTreeSet<&str> = members.iter().filter_map(Value::as_str).collect();
    assert_eq!(members, BTreeSet::from(["core", "drivers", "config", "daemon", "simulators"]), "five packages");
    assert_eq!(workspace["workspace"]["default-members"], Value::from(vec!["daemon"]), "`cargo run` means the one program");
    for member in members {
        let text = manifest(&format!("{member}/Cargo.toml"));
        complain("dependencies", &wrong_edges(&text, &workspace));
        assert_eq!(text["lints"]["workspace"].as_bool(), Some(true), "{member}: the lints of the workspace");
    }
    let lints = &workspace["workspace"]["lints"]["rust"];
    assert_eq!((lints["unsafe_code"].as_str(), lints["missing_docs"].as_str()), (Some("forbid"), Some("deny")));
}

#[test]
fn a_wrong_edge_is_seen_under_any_name() {
    let workspace: Table = "[workspace.dependencies]\nquiet = { package = \"tarecup\", path = \"daemon\" }".parse().unwrap();
    let wrong = [
        ("[package]\nname = \"tarecup-core\"\n[dependencies]\ntokio = \"1\"", "the core may not use tokio"),
        (
            "[package]\nname = \"tarecup-core\"\n[dependencies]\nx = { package = \"tarecup-config\", path = \"\" }",
            "tarecup-config",
        ),
        ("[package]\nname = \"tarecup-drivers\"\n[dependencies]\nquiet = { workspace = true }", "may not use tarecup "),
        ("[package]\nname = \"tarecup-config\"\n[target.'cfg(unix)'.dependencies]\ntarecup-simulators = {}", "cfg(unix)"),
        ("[package]\nname = \"tarecup-simulators\"\n[dev-dependencies]\ntarecup-drivers = {}", "tarecup-drivers"),
        ("[package]\nname = \"tarecup-drivers\"\n[build-dependencies]\ntarecup = {}", "build-dependencies"),
        ("[package]\nname = \"tarecup-extra\"", "no package of this house"),
    ];
    for (text, words) in wrong {
        let complaints = wrong_edges(&text.parse().unwrap(), &workspace);
        assert!(complaints.len() == 1 && complaints[0].contains(words), "{text}: {complaints:?}");
    }
    let right = "[package]\nname = \"tarecup-drivers\"\n[dev-dependencies]\ntarecup-simulators = {}\ntoml = \"1\"";
    assert_eq!(wrong_edges(&right.parse().unwrap(), &workspace), [""; 0]);
}

// ---- what lies where ----------------------------------------------------------------------------------------------

fn wrong_top(names: &BTreeSet<String>) -> Vec<String> {
    let wanted: BTreeSet<&str> = ROOMS.into_iter().chain(TOP_FILES).collect();
    let seen: BTreeSet<&str> = names.iter().map(String::as_str).filter(|n| !n.starts_with('.') && *n != "target").collect();
    let extra = seen.difference(&wanted).map(|n| format!("{n} does not belong at the top"));
    extra.chain(wanted.difference(&seen).map(|n| format!("{n} is missing at the top"))).collect()
}

#[test]
fn the_top_of_the_repository_is_as_agreed() {
    complain("the top level", &wrong_top(&names_in(".")));
    let mut names = names_in(".");
    names.insert("notes.txt".into());
    names.remove("LICENSE");
    assert_eq!(wrong_top(&names), ["notes.txt does not belong at the top", "LICENSE is missing at the top"]);
}

/// Test files that no package runs, and entries without a file.
fn lost_tests(files: &BTreeMap<String, String>, listed: &BTreeSet<String>) -> Vec<String> {
    let included = |file: &str| {
        let name = file.trim_start_matches("tests/");
        let module = name.trim_end_matches(".rs").trim_end_matches("/mod");
        let (by_path, by_name) = (format!("#[path = \"{name}\"]"), format!("mod {module};"));
        let includes = |text: &str| text.contains(&by_path) || text.lines().any(|l| l.trim_start_matches("pub ") == by_name);
        files.iter().any(|(other, text)| other.starts_with("tests/") && other != file && includes(text))
    };
    let lost = files.keys().filter(|f| f.starts_with("tests/") && !listed.contains(*f) && !included(f));
    let lost = lost.map(|f| format!("{f} is run by no package: add a [[test]] entry"));
    lost.chain(listed.iter().filter(|f| !files.contains_key(*f)).map(|f| format!("{f} is listed and not there"))).collect()
}

#[test]
fn every_test_file_is_run() {
    let files = rust_files();
    let mut listed = BTreeSet::new();
    for room in &ROOMS[..5] {
        let text = manifest(&format!("{room}/Cargo.toml"));
        for test in text.get("test").and_then(Value::as_array).into_iter().flatten() {
            let path = test["path"].as_str().expect("a path");
            listed.insert(path.strip_prefix("../").unwrap_or(path).to_string());
        }
    }
    complain("test files", &lost_tests(&files, &listed));
    let mut more = files.clone();
    more.insert("tests/forgotten.rs".into(), String::new());
    listed.insert("tests/gone.rs".into());
    let complaints = lost_tests(&more, &listed);
    assert!(complaints.len() == 2 && complaints[0].contains("forgotten") && complaints[1].contains("gone"), "{complaints:?}");
}

// ---- how the source is written ------------------------------------------------------------------------------------

fn wrong_source(path: &str, text: &str) -> Vec<String> {
    let mut complaints = Vec::new();
    let code = code_only(text);
    let lines = text.lines().count();
    if lines > FILE_LINES {
        complaints.push(format!("{path} has {lines} lines, more than {FILE_LINES}: divide it"));
    }
    let most = if path.starts_with("tests/") { TABLE_LINES } else { FUNCTION_LINES };
    for f in functions(&code).iter().filter(|f| f.lines > most) {
        complaints.push(format!("{path}:{} fn {} has {} lines, more than {most}", f.line, f.name, f.lines));
    }
    let head = path.ends_with("/src/lib.rs") || path.ends_with("/src/main.rs");
    if head && !code.contains("#![forbid(unsafe_code)]") {
        complaints.push(format!("{path} lacks #![forbid(unsafe_code)]"));
    }
    if path == "core/src/lib.rs" && !code.contains("#![no_std]") {
        complaints.push(format!("{path} lacks #![no_std]"));
    }
    let mut before = "";
    for (n, line) in code.lines().enumerate() {
        if path.starts_with("core/src/") && line.contains("extern crate std") && before.trim() != "#[cfg(test)]" {
            complaints.push(format!("{path}:{} brings std into the core outside its tests", n + 1));
        }
        if line.contains("#[ignore") {
            complaints.push(format!("{path}:{} skips a test", n + 1));
        }
        before = line;
    }
    complaints
}

#[test]
fn the_source_keeps_to_the_house_rules() {
    let complaints: Vec<String> = rust_files().iter().flat_map(|(path, text)| wrong_source(path, text)).collect();
    complain("the source", &complaints);
}

#[test]
fn broken_source_is_seen() {
    let long = format!("fn long() {{\n{}}}\n", "    work();\n".repeat(FUNCTION_LINES));
    let complaints = wrong_source("daemon/src/a.rs", &long);
    assert!(complaints.len() == 1 && complaints[0].contains("daemon/src/a.rs:1 fn long has 92 lines"), "{complaints:?}");
    assert_eq!(wrong_source("tests/a.rs", &long), [""; 0]);
    assert_eq!(wrong_source("tests/a.rs", &long.replace("fn long() {", "fn long() {\n\n\n\n\n\n\n\n\n")).len(), 1);
    let short = format!("fn short() {{ /* {{ */ let _ = (\"{{\", '{{', r#\"{{\"#); }}\n{}", "// }\n".repeat(FUNCTION_LINES));
    assert_eq!(wrong_source("daemon/src/a.rs", &short), [""; 0], "braces in texts and comments are none");
    assert_eq!(wrong_source("daemon/src/a.rs", &"\n".repeat(FILE_LINES + 1)).len(), 1);
    assert_eq!(wrong_source("core/src/lib.rs", "// #![no_std] #![forbid(unsafe_code)]\nextern crate std;").len(), 3);
    assert_eq!(wrong_source("core/src/lib.rs", "#![no_std]\n#![forbid(unsafe_code)]\n#[cfg(test)]\nextern crate std;").len(), 0);
    assert_eq!(wrong_source("tests/a.rs", "#[test]\n#[ignore = \"slow\"]\nfn a() {}").len(), 1);
}

// ---- whether the documents speak of this program ------------------------------------------------------------------

/// Runs the program; gives its exit code and what it says.
fn tarecup(words: &[&str]) -> (Option<i32>, String) {
    let output = Command::new(env!("CARGO_BIN_EXE_tarecup")).args(words).output().expect("the program starts");
    let text = [output.stdout, output.stderr].concat();
    (output.status.code(), String::from_utf8_lossy(&text).into_owned())
}

/// Verbs that the program knows.
fn verbs() -> BTreeSet<String> {
    let help = tarecup(&["help"]).1;
    let list = help.lines().skip_while(|l| l.trim() != "Commands:").skip(1).take_while(|l| !l.trim().is_empty());
    let verbs: BTreeSet<String> = list.filter_map(|l| l.split_whitespace().next()).map(String::from).collect();
    assert!(verbs.contains("help") && verbs.len() > 3, "`tarecup help` lists its commands:\n{help}");
    verbs
}

/// A use of the program in a document: verb and options.
fn use_of(piece: &str) -> Option<(String, Vec<String>)> {
    let words: Vec<&str> = piece.split_whitespace().collect();
    let program = |n: usize, w: &&str| (*w == "tarecup" || w.ends_with("/tarecup")) && (n == 0 || words[n - 1] != "-p");
    let by_cargo = piece.contains("cargo run") && !piece.contains("-p ");
    let at = words.iter().enumerate().position(|(n, w)| program(n, w) || (by_cargo && *w == "--"))?;
    let verb = words.get(at + 1).filter(|w| w.chars().all(|c| c.is_ascii_lowercase()))?;
    let rest = words[at + 2..].iter().take_while(|w| !["#", "|", "&&", ";", "&"].contains(w));
    let options = rest.map(|w| w.trim_matches(['[', ']'])).filter(|w| w.starts_with("--"));
    Some((verb.to_string(), options.map(|o| o.split('=').next().unwrap_or(o).to_string()).collect()))
}

fn wrong_uses(document: &str, help_of: &dyn Fn(&str) -> Option<String>) -> Vec<String> {
    let mut complaints = Vec::new();
    for piece in code_pieces(document) {
        let Some((verb, options)) = use_of(&piece) else { continue };
        match help_of(&verb) {
            None => complaints.push(format!("`{piece}`: there is no command {verb}")),
            Some(help) => {
                let has = |option: &str| help.split(|c: char| c.is_whitespace() || ",[]=".contains(c)).any(|w| w == option);
                let unknown = options.iter().filter(|o| !has(o));
                complaints.extend(unknown.map(|o| format!("`{piece}`: {verb} has no option {o}")));
            }
        }
    }
    complaints
}

#[test]
fn commands_in_the_documents_exist_and_every_command_is_told() {
    let verbs = verbs();
    let help_of = |verb: &str| verbs.contains(verb).then(|| tarecup(&[verb, "--help"]).1);
    let readme = read("README.md");
    complain("README.md", &wrong_uses(&readme, &help_of));
    complain("DEVELOPERS.md", &wrong_uses(&read("DEVELOPERS.md"), &help_of));
    let told: BTreeSet<String> = code_pieces(&readme).iter().filter_map(|p| use_of(p)).map(|(verb, _)| verb).collect();
    let untold: Vec<String> = verbs.iter().filter(|v| *v != "help" && !told.contains(*v)).cloned().collect();
    complain("commands that README.md does not tell", &untold);

    let wrong =
        "`tarecup dance` and\n```sh\n$ ./x/tarecup run --quickly\ncargo run --release -- sing --loud\n```\nnot tarecup walk";
    let complaints = wrong_uses(wrong, &|v| (v == "run").then(|| String::from("  --config <FILE>")));
    assert_eq!(complaints.len(), 3, "{complaints:?}");
}

fn untold(document: &str, words: impl IntoIterator<Item = String>) -> Vec<String> {
    let pieces = code_pieces(document);
    let apart = |c: char| !(c.is_ascii_alphanumeric() || "_-+".contains(c));
    let told: BTreeSet<&str> = pieces.iter().flat_map(|p| p.split(apart)).collect();
    words.into_iter().filter(|w| !told.contains(w.as_str())).collect()
}

#[test]
fn profiles_methods_asks_facts_and_cards_are_told() {
    let readme = read("README.md");
    for folder in ["config/profiles", "config/methods"] {
        let names: Vec<String> = names_in(folder).iter().filter_map(|n| n.strip_suffix(".toml").map(String::from)).collect();
        assert!(names.len() > 3, "{folder} holds {names:?}");
        complain(folder, &untold(&readme, names));
    }
    for (file, name, least) in [("core/src/lab/ask.rs", "Ask", 20), ("core/src/fact.rs", "Fact", 25)] {
        let words: Vec<String> = variants(&code_only(&read(file)), name).iter().map(|v| snake_case(v)).collect();
        assert!(words.len() >= least, "{file}: {words:?}");
        complain(&format!("each {name} in README.md"), &untold(&readme, words));
    }
    // The one that signs in is told with initials behind it.
    let cards = tarecup_core::lab::CARDS.map(|(card, _)| String::from(card)).into_iter().filter(|c| !c.ends_with('-'));
    complain("cards", &untold(&readme, cards));
    assert_eq!(untold("`signed-steady-2` and +undo", [String::from("signed-steady"), String::from("+undo")]).len(), 2);
}

#[test]
fn files_written_out_in_the_readme_are_right() {
    let folder = tempfile::tempdir().expect("a folder");
    let blocks: Vec<String> = fenced(&read("README.md")).into_iter().filter(|b| b.0 == "toml").map(|b| b.1).collect();
    let (mut configs, mut sheets) = (0, 0);
    let mut judge = |text: &str| {
        let path = folder.path().join("sample.toml");
        std::fs::write(&path, text).expect("a file");
        let path = path.to_string_lossy().into_owned();
        let sheet = text.contains("[[specimen]]");
        *(if sheet { &mut sheets } else { &mut configs }) += 1;
        let words: &[&str] = if sheet { &["work", "--json", &path] } else { &["check", "--config", &path] };
        let (code, says) = tarecup(words);
        (code != Some(0)).then(|| format!("{text}\n→ {code:?} {says}"))
    };
    let complaints: Vec<String> = blocks.iter().filter_map(|b| judge(b)).collect();
    complain("README.md", &complaints);
    assert!(judge("[[instrument]]\nname = \"pan-1\"\nknd = \"balance\"\n").is_some(), "a wrong key is a fault");
    assert!(judge("[[specimen]]\nid = \"S-1\"\n[[specimen.liquid]]\ndrops = \"many\"\n").is_some(), "a wrong sheet is a fault");
    assert!(configs >= 3 && sheets >= 2, "README.md shows configs and a sheet: {configs}, {sheets}");
}

/// Files, and tests written as `file::function`, that a document names and that are not there.
fn wrong_places(document: &str, exists: &dyn Fn(&str) -> bool, text_of: &dyn Fn(&str) -> String) -> Vec<String> {
    let ours = |p: &&String| ROOMS.iter().any(|r| p.starts_with(&format!("{r}/"))) && !p.contains(char::is_whitespace);
    let mut complaints = Vec::new();
    for piece in code_pieces(document).iter().filter(ours) {
        let (path, function) = piece.split_once("::").map_or((piece.as_str(), None), |(p, f)| (p, Some(f)));
        if path.contains(['*', '…', '{', '<']) {
            continue;
        }
        if !exists(path) {
            complaints.push(format!("{path} is not there"));
        } else if let Some(f) = function
            && !text_of(path).contains(&format!("fn {f}("))
        {
            complaints.push(format!("{path} has no function {f}"));
        }
    }
    complaints
}

#[test]
fn places_that_the_documents_name_exist() {
    let exists = |path: &str| Path::new(&root()).join(path).exists() || path == "tests/.venv" || path == "tests/.work";
    for document in ["README.md", "DEVELOPERS.md"] {
        complain(document, &wrong_places(&read(document), &exists, &|p| read(p)));
    }
    let wrong = "`core/src/nowhere.rs`, `tests/house.rs::no_such_test` and `tests/house.rs`";
    assert_eq!(
        wrong_places(wrong, &exists, &|p| read(p)),
        ["core/src/nowhere.rs is not there", "tests/house.rs has no function no_such_test"]
    );
}
