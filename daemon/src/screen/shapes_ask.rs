//! The shape of an ask, for the description of the HTTP interface. What is
//! taken is decided by [`tarecup_core::lab::ask::Ask`]; a test keeps the two alike.

use super::shapes::{Intention, Kind, Role};
use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// A mass in grams, as text or number: `"21.43"`.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(untagged)]
#[allow(missing_docs)]
pub enum Grams {
    Text(String),
    Number(f64),
}

/// A limit.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
#[allow(missing_docs)]
pub enum Limit {
    Liquid,
    Plastic,
}

/// What is asked for.
#[derive(Serialize, Deserialize, JsonSchema)]
#[allow(missing_docs)]
pub struct AskBody {
    /// Makes it safe to ask again: the same client gets the same answer and nothing is done twice.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    #[schemars(length(min = 1, max = 64))]
    pub ask_id: Option<String>,
    /// PIN of `who`: needed by corrections, answers and reviews unless the session is proven. Never kept.
    #[serde(default, skip_serializing_if = "Option::is_none")]
    pub pin: Option<String>,
    #[serde(flatten)]
    pub ask: AskShape,
}

/// What is asked for, by its word.
#[derive(Serialize, Deserialize, JsonSchema)]
#[serde(tag = "ask", rename_all = "snake_case")]
#[allow(missing_docs)]
pub enum AskShape {
    OpenSpecimen {
        specimen: String,
        method: Option<String>,
        edition: Option<String>,
        description: Option<String>,
        preparation: Option<String>,
        passing_75um_percent: Option<f64>,
        clay_percent: Option<f64>,
        #[serde(default)]
        wanted: Vec<Intention>,
        liquid_limit_oven_dried: Option<f64>,
        who: Option<String>,
    },
    SignIn {
        bench: String,
        operator: String,
    },
    SignOut {
        bench: String,
    },
    Intend {
        bench: String,
        specimen: String,
        intention: Intention,
        who: Option<String>,
    },
    IntendNothing {
        bench: String,
        who: Option<String>,
    },
    Code {
        bench: String,
        text: String,
    },
    SayRole {
        bench: String,
        container: String,
        role: Role,
        who: Option<String>,
        why: String,
    },
    Tie {
        weighing: u64,
        bench: String,
        container: String,
        role: Role,
        who: Option<String>,
        why: String,
    },
    TieCount {
        count: u64,
        bench: String,
        specimen: String,
        who: Option<String>,
        why: String,
    },
    Explain {
        what: u64,
        who: Option<String>,
        why: String,
    },
    MoveTrial {
        specimen: String,
        kind: Kind,
        no: u32,
        to: String,
        who: Option<String>,
        why: String,
    },
    SetAside {
        what: u64,
        who: Option<String>,
        why: String,
    },
    SetAsideTrial {
        specimen: String,
        kind: Kind,
        no: u32,
        who: Option<String>,
        why: String,
    },
    AmendMass {
        weighing: u64,
        mass_g: Grams,
        who: Option<String>,
        why: String,
    },
    AmendDrops {
        count: u64,
        drops: u32,
        who: Option<String>,
        why: String,
    },
    AmendPenetration {
        what: u64,
        penetration_mm: f64,
        who: Option<String>,
        why: String,
    },
    TypeMass {
        bench: String,
        container: String,
        mass_g: Grams,
        role: Option<Role>,
        who: Option<String>,
    },
    TypeDrops {
        bench: String,
        drops: u32,
        who: Option<String>,
    },
    TypePenetration {
        bench: String,
        penetration_mm: f64,
        who: Option<String>,
    },
    Slid {
        bench: String,
        who: Option<String>,
        why: Option<String>,
    },
    GrooveTore {
        bench: String,
        who: Option<String>,
        why: Option<String>,
    },
    NewPaste {
        bench: String,
        who: Option<String>,
        why: Option<String>,
    },
    Undo {
        bench: String,
        who: Option<String>,
        why: Option<String>,
    },
    RegisterContainer {
        container: String,
        lid_g: Option<String>,
        tare_g: Option<String>,
        who: Option<String>,
    },
    FreeContainer {
        container: String,
        who: Option<String>,
        why: String,
    },
    IntoOven {
        containers: Vec<String>,
        celsius: Option<f64>,
        who: Option<String>,
    },
    OutOfOven {
        containers: Vec<String>,
        who: Option<String>,
    },
    OvenOff {
        from: String,
        to: Option<String>,
        who: Option<String>,
        why: String,
    },
    ClockRight {
        who: Option<String>,
        why: String,
    },
    NotObtainable {
        specimen: String,
        limit: Limit,
        because: String,
        who: Option<String>,
    },
    AnswerCheck {
        specimen: String,
        check: String,
        about: String,
        says: String,
        who: Option<String>,
    },
    CheckBalance {
        balance: String,
        nominal_g: Grams,
        certificate_g: Option<Grams>,
        class: Option<String>,
        who: Option<String>,
    },
    CheckCup {
        cup: String,
        drop_height_mm: f64,
        wear: String,
        base: String,
        tool: Option<String>,
        who: Option<String>,
    },
    Review {
        specimen: String,
        who: Option<String>,
    },
    ConfirmPort {
        instrument: String,
        who: String,
    },
    Advice {
        bench: Option<String>,
        specimen: Option<String>,
        paste_g: Option<Grams>,
        drops: Option<u32>,
    },
    /// Which of these would be refused; nothing is done.
    Would {
        #[schemars(length(max = 200))]
        asks: Vec<AskShape>,
    },
    Shelf {},
    Loose {},
    Status {},
    Latest {
        bench: String,
    },
    Document {
        kind: String,
        id: String,
    },
    FactsAfter {
        seq: u64,
        limit: Option<u64>,
    },
}

#[cfg(test)]
mod tests {
    use super::*;
    use serde_json::{Value, json};
    use tarecup_core::lab::ask::Ask;

    /// One ask of each kind with every member.
    fn every() -> Vec<Value> {
        let mut all = vec![
            json!({"ask":"open_specimen","specimen":"S","method":"m","edition":"e","description":"d","preparation":"p","passing_75um_percent":1.0,"clay_percent":1.0,"wanted":["liquid"],"liquid_limit_oven_dried":31.0,"who":"AB"}),
            json!({"ask":"sign_in","bench":"b","operator":"AB"}),
            json!({"ask":"sign_out","bench":"b"}),
            json!({"ask":"intend","bench":"b","specimen":"S","intention":"plastic","who":"AB"}),
            json!({"ask":"intend_nothing","bench":"b","who":"AB"}),
            json!({"ask":"code","bench":"b","text":"C1"}),
            json!({"ask":"say_role","bench":"b","container":"C1","role":"tare_with_lid","who":"AB","why":"w"}),
            json!({"ask":"tie","weighing":1,"bench":"b","container":"C1","role":"further_dry","who":"AB","why":"w"}),
            json!({"ask":"tie_count","count":1,"bench":"b","specimen":"S","who":"AB","why":"w"}),
            json!({"ask":"set_aside","what":1,"who":"AB","why":"w"}),
            json!({"ask":"set_aside_trial","specimen":"S","kind":"thread","no":1,"who":"AB","why":"w"}),
            json!({"ask":"amend_mass","weighing":1,"mass_g":"21.43","who":"AB","why":"w"}),
            json!({"ask":"amend_drops","count":1,"drops":25,"who":"AB","why":"w"}),
            json!({"ask":"type_mass","bench":"b","container":"C1","mass_g":"21.43","role":"emptied","who":"AB"}),
            json!({"ask":"type_drops","bench":"b","drops":25,"who":"AB"}),
            json!({"ask":"explain","what":1,"who":"AB","why":"w"}),
            json!({"ask":"move_trial","specimen":"S","kind":"thread","no":1,"to":"T","who":"AB","why":"w"}),
            json!({"ask":"amend_penetration","what":1,"penetration_mm":18.5,"who":"AB","why":"w"}),
            json!({"ask":"type_penetration","bench":"b","penetration_mm":18.5,"who":"AB"}),
            json!({"ask":"slid","bench":"b","who":"AB","why":"w"}),
            json!({"ask":"groove_tore","bench":"b","who":"AB","why":"w"}),
            json!({"ask":"new_paste","bench":"b","who":"AB","why":"w"}),
            json!({"ask":"undo","bench":"b","who":"AB","why":"w"}),
            json!({"ask":"register_container","container":"C1","lid_g":"4.1","tare_g":"21.4","who":"AB"}),
            json!({"ask":"free_container","container":"C1","who":"AB","why":"w"}),
            json!({"ask":"into_oven","containers":["C1"],"celsius":110.0,"who":"AB"}),
            json!({"ask":"out_of_oven","containers":["C1"],"who":"AB"}),
            json!({"ask":"oven_off","from":"f","to":"t","who":"AB","why":"w"}),
            json!({"ask":"clock_right","who":"AB","why":"w"}),
            json!({"ask":"not_obtainable","specimen":"S","limit":"liquid","because":"b","who":"AB"}),
            json!({"ask":"answer_check","specimen":"S","check":"c","about":"a","says":"s","who":"AB"}),
            json!({"ask":"check_balance","balance":"pan-1","nominal_g":"50","certificate_g":"50.0004","class":"F2","who":"AB"}),
            json!({"ask":"check_cup","cup":"cup-1","drop_height_mm":10.0,"wear":"w","base":"b","tool":"t","who":"AB"}),
            json!({"ask":"review","specimen":"S","who":"AB"}),
        ];
        all.sort_by_key(|a| a["ask"].as_str().map(String::from));
        all
    }

    /// A new kind of ask makes this fail to compile until it is described.
    fn described(ask: &Ask) -> usize {
        use Ask::*;
        match ask {
            OpenSpecimen { .. } | SignIn { .. } | SignOut { .. } | Intend { .. } | IntendNothing { .. } => 34,
            Code { .. } | SayRole { .. } | Tie { .. } | TieCount { .. } | SetAside { .. } | SetAsideTrial { .. } => 34,
            AmendMass { .. } | AmendDrops { .. } | TypeMass { .. } | TypeDrops { .. } | NewPaste { .. } => 34,
            Undo { .. } | RegisterContainer { .. } | FreeContainer { .. } | IntoOven { .. } => 34,
            Explain { .. } | MoveTrial { .. } | AmendPenetration { .. } | TypePenetration { .. } => 34,
            Slid { .. } | GrooveTore { .. } | ClockRight { .. } | CheckBalance { .. } | CheckCup { .. } => 34,
            OutOfOven { .. } | OvenOff { .. } | NotObtainable { .. } | AnswerCheck { .. } | Review { .. } => 34,
        }
    }

    /// Asks that are not of the core: the desk reads them by hand.
    #[test]
    fn what_only_reads_is_described_as_it_is_read() {
        for ask in [
            json!({"ask":"confirm_port","instrument":"pan-1","who":"AB"}),
            json!({"ask":"advice","bench":"b","specimen":"S","paste_g":"182.5","drops":40}),
            json!({"ask":"would","asks":[{"ask":"code","bench":"b","text":"C1"}]}),
            json!({"ask":"shelf"}),
            json!({"ask":"loose"}),
            json!({"ask":"status"}),
            json!({"ask":"latest","bench":"b"}),
            json!({"ask":"document","kind":"specimen","id":"S"}),
            json!({"ask":"facts_after","seq":1,"limit":10}),
        ] {
            crate::asks::parse(&ask.to_string()).unwrap_or_else(|e| panic!("{ask}: {e}"));
            let shape: AskShape = serde_json::from_value(ask.clone()).unwrap_or_else(|e| panic!("{ask}: {e}"));
            assert_eq!(serde_json::to_value(&shape).expect("json"), ask);
        }
    }

    #[test]
    fn the_shape_and_what_is_taken_are_alike() {
        let all = every();
        for ask in &all {
            let taken: Ask = serde_json::from_value(ask.clone()).unwrap_or_else(|e| panic!("{ask}: {e}"));
            assert_eq!(described(&taken), all.len());
            assert_eq!(serde_json::to_value(&taken).expect("json"), *ask, "an ask of the core has members that are missing here");
            let shape: AskShape = serde_json::from_value(ask.clone()).unwrap_or_else(|e| panic!("{ask}: {e}"));
            assert_eq!(serde_json::to_value(&shape).expect("json"), *ask);
        }
    }
}
