//! The description of the HTTP interface (OpenAPI 3.1), made from the shapes.

use super::shapes::{self, Refusal};
use super::shapes_ask::AskBody;
use schemars::generate::{SchemaGenerator, SchemaSettings};
use schemars::{JsonSchema, Schema};
use serde_json::{Map, Value, json};

type Of = fn(&mut SchemaGenerator) -> Schema;

fn of<T: JsonSchema>(generator: &mut SchemaGenerator) -> Schema {
    generator.subschema_for::<T>()
}

/// One thing that can be asked over HTTP.
struct Path {
    method: &'static str,
    path: &'static str,
    says: &'static str,
    /// Kind of the body and its shape.
    takes: Option<(&'static str, Option<Of>)>,
    gives: Option<Of>,
    /// Statuses of refusals beside those that every path may give.
    refuses: &'static [u16],
}

const GET: Path = Path { method: "get", path: "", says: "", takes: None, gives: None, refuses: &[] };

/// All of them.
const PATHS: &[Path] = &[
    Path { path: "/api/status", says: "How the service is doing", gives: Some(of::<shapes::Status>), refuses: &[503], ..GET },
    Path { path: "/api/benches", says: "Every bench", gives: Some(of::<shapes::Benches>), ..GET },
    Path { path: "/api/bench/{bench}", says: "A bench", gives: Some(of::<shapes::Bench>), refuses: &[404], ..GET },
    Path { path: "/api/specimens", says: "Specimens at hand", gives: Some(of::<shapes::Specimens>), ..GET },
    Path { path: "/api/specimen/{specimen}", says: "A specimen", gives: Some(of::<shapes::Specimen>), refuses: &[404], ..GET },
    Path {
        path: "/api/specimen/{specimen}/limits",
        says: "The result of a specimen",
        gives: Some(of::<shapes::Limits>),
        refuses: &[404],
        ..GET
    },
    Path { path: "/api/containers", says: "The register of containers", gives: Some(of::<shapes::Containers>), ..GET },
    Path {
        path: "/api/container/{container}",
        says: "A container",
        gives: Some(of::<shapes::Container>),
        refuses: &[404],
        ..GET
    },
    Path { path: "/api/instruments", says: "Every instrument", gives: Some(of::<shapes::Instruments>), ..GET },
    Path {
        path: "/api/instrument/{instrument}",
        says: "An instrument",
        gives: Some(of::<shapes::Instrument>),
        refuses: &[404],
        ..GET
    },
    Path { path: "/api/loose", says: "Weighings and counts tied to nothing", gives: Some(of::<shapes::LooseThings>), ..GET },
    Path { path: "/api/facts", says: "Facts after a number", gives: Some(of::<shapes::Facts>), refuses: &[400, 503], ..GET },
    Path {
        method: "post",
        path: "/api/ask",
        says: "Asks for something; the same handler as behind the local socket and MQTT",
        takes: Some(("application/json", Some(of::<AskBody>))),
        gives: Some(of::<shapes::Done>),
        refuses: &[400, 413, 415, 422, 429, 503],
    },
    Path { path: "/api/session", says: "Who is signed in at this screen", gives: Some(of::<shapes::Session>), ..GET },
    Path {
        method: "post",
        path: "/api/session",
        says: "Signs in with a PIN; the answer sets a cookie",
        takes: Some(("application/json", Some(of::<shapes::SignIn>))),
        gives: Some(of::<shapes::Session>),
        refuses: &[400, 415, 429],
    },
    Path { method: "delete", path: "/api/session", says: "Signs out", gives: Some(of::<shapes::Session>), ..GET },
    Path {
        method: "post",
        path: "/api/import/{list}",
        says: "A list of containers or specimens (CSV); with take=true its good lines are taken, else only looked at",
        takes: Some(("text/csv", None)),
        gives: Some(of::<shapes::Imported>),
        refuses: &[400, 404, 413, 415, 422],
    },
    Path { path: "/api/openapi.json", says: "This description", ..GET },
];

const NAME: &str = "^[A-Za-z0-9._-]{1,32}$";

/// Members of the path, and of the query.
fn parameters(path: &str) -> Vec<Value> {
    let in_path = path.split('{').skip(1).filter_map(|p| p.split('}').next());
    let of = |name: &str| match name {
        "list" => json!({"name": name, "in": "path", "required": true, "schema": {"enum": ["containers", "specimens"]}}),
        _ => json!({"name": name, "in": "path", "required": true, "schema": {"type": "string", "pattern": NAME}}),
    };
    let mut all: Vec<Value> = in_path.map(of).collect();
    let query = |name: &str, schema: Value| json!({"name": name, "in": "query", "required": false, "schema": schema});
    match path {
        "/api/facts" => all.extend([
            query("after", json!({"type": "integer", "minimum": 0, "default": 0})),
            query("limit", json!({"type": "integer", "minimum": 1, "maximum": 1000, "default": 100})),
        ]),
        "/api/import/{list}" => all.push(query("take", json!({"type": "boolean", "default": false}))),
        _ => (),
    }
    all
}

fn operation(path: &Path, generator: &mut SchemaGenerator) -> Value {
    let mut responses = Map::new();
    let gives = path.gives.map_or_else(|| json!({"type": "object"}), |of| of(generator).to_value());
    responses.insert("200".into(), json!({"description": "Done", "content": {"application/json": {"schema": gives}}}));
    let refusal = of::<Refusal>(generator).to_value();
    // Of every path: a foreign website or a wrong PIN, the secret missing, another name for this station, too slow.
    let always = [401, 403, 408, 421];
    for status in always.iter().chain(path.refuses) {
        let refused = json!({"description": "Refused", "content": {"application/json": {"schema": refusal}}});
        responses.insert(status.to_string(), refused);
    }
    let id = format!("{}{}", path.method, path.path.replace(['/', '{', '}', '.'], "_"));
    let mut operation = json!({
        "operationId": id, "summary": path.says, "parameters": parameters(path.path), "responses": responses,
    });
    if let Some((kind, shape)) = path.takes {
        let schema = shape.map_or_else(|| json!({"type": "string"}), |of| of(generator).to_value());
        operation["requestBody"] = json!({"required": true, "content": {kind: {"schema": schema}}});
    }
    operation
}

/// The document.
pub fn document() -> Value {
    let settings = SchemaSettings::draft2020_12().with(|s| s.definitions_path = "/components/schemas".into());
    let mut generator = settings.into_generator();
    let mut paths = Map::new();
    for path in PATHS {
        let operation = operation(path, &mut generator);
        let of = paths.entry(path.path).or_insert_with(|| json!({}));
        of[path.method] = operation;
    }
    let shapes = generator.take_definitions(true);
    json!({
        "openapi": "3.1.0",
        "jsonSchemaDialect": "https://json-schema.org/draft/2020-12/schema",
        "info": {
            "title": "tarecup", "version": env!("CARGO_PKG_VERSION"),
            "description": "HTTP interface of a tarecup station. Times are UTC, masses in grams, water contents percent of dry mass.",
            "license": {"name": "MIT", "identifier": "MIT"},
        },
        "paths": paths,
        "components": {"schemas": shapes},
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_reference_leads_somewhere() {
        let document = document();
        let text = document.to_string();
        let mut found = 0;
        for part in text.split("\"$ref\":\"#").skip(1) {
            let pointer = part.split('"').next().expect("a reference");
            assert!(document.pointer(pointer).is_some(), "{pointer}");
            found += 1;
        }
        assert!(found > 30, "{found}");
    }
}
