//! Every text of the bench screen in one place, so that it can be translated.
//! Sentences of the core (what comes next, checks, refusals) come with the data.

use super::view::Connected;

/// Roles that a person may give a mass, in the order of a container's day.
pub const ROLES: [&str; 9] = ["tare", "tare_check", "tare_with_lid", "wet", "repeat", "grown", "dry", "further_dry", "emptied"];

/// Puts texts into the places `{}` of another, in turn.
pub fn fill(text: &str, values: &[&str]) -> String {
    let mut values = values.iter();
    let mut parts = text.split("{}");
    let mut full = String::from(parts.next().unwrap_or(""));
    for part in parts {
        full.push_str(values.next().copied().unwrap_or(""));
        full.push_str(part);
    }
    full
}

macro_rules! words {
    ($($name:ident: $text:literal;)*) => {
        /// Texts of the screen in one language. A place for a value is `{}`.
        #[derive(Clone, Copy, Debug)]
        pub struct Words { $(#[doc = $text] pub $name: &'static str,)* }

        /// English.
        pub const ENGLISH: Words = Words { $($name: $text,)* };

        impl Words {
            /// These texts, each changed: how a translation is made, or tried.
            pub fn each(&self, mut to: impl FnMut(&'static str, &'static str) -> &'static str) -> Self {
                Self { $($name: to(stringify!($name), self.$name),)* }
            }
        }
    };
}

impl Words {
    /// What a mass is of.
    pub fn role<'a>(&self, role: &'a str) -> &'a str
    where
        Self: 'a,
    {
        match role {
            "tare" => self.role_tare,
            "tare_check" => self.role_tare_check,
            "tare_with_lid" => self.role_tare_with_lid,
            "wet" => self.role_wet,
            "repeat" => self.role_repeat,
            "grown" => self.role_grown,
            "dry" => self.role_dry,
            "further_dry" => self.role_further_dry,
            "emptied" => self.role_emptied,
            other => other,
        }
    }
    /// Where a container stands.
    pub fn standing<'a>(&self, standing: &'a str) -> &'a str
    where
        Self: 'a,
    {
        match standing {
            "unknown" => self.standing_unknown,
            "free" => self.standing_free,
            "wet" => self.standing_wet,
            "in_oven" => self.standing_in_oven,
            "drying" => self.standing_drying,
            "dry" => self.standing_dry,
            other => other,
        }
    }
    /// State of a result.
    pub fn result_state<'a>(&self, state: &'a str) -> &'a str
    where
        Self: 'a,
    {
        match state {
            "provisional" => self.state_provisional,
            "complete" => self.state_complete,
            "reviewed" => self.state_reviewed,
            other => other,
        }
    }
    /// Kind of an instrument.
    pub fn kind<'a>(&self, kind: &'a str) -> &'a str
    where
        Self: 'a,
    {
        match kind {
            "balance" => self.kind_balance,
            "counter" => self.kind_counter,
            "scanner" => self.kind_scanner,
            other => other,
        }
    }
    /// State of a connection.
    pub fn connected(&self, state: Connected) -> &'static str {
        match state {
            Connected::Waiting => self.connected_waiting,
            Connected::Speaking => self.live,
            Connected::Silent => self.connected_silent,
            Connected::WrongLanguage => self.connected_wrong_language,
            Connected::PortLost => self.connected_port_lost,
        }
    }
}

words! {
    language: "en";
    // Units and short names.
    gram: "g";
    percent: "%";
    second: "s";
    utc: "UTC";
    drops: "drops";
    per_second: "/s";
    ll: "LL";
    pl: "PL";
    pi: "PI";
    np: "NP";
    // The frame.
    skip: "Go to what comes next";
    ways: "Pages";
    way_bench: "Bench";
    way_shelf: "Oven shelf";
    way_loose: "Loose";
    way_laboratory: "Laboratory";
    loose_things: "tied to nothing";
    ready_things: "ready to be weighed dry";
    recording: "Recording";
    not_recording: "NOT RECORDING.";
    not_recording_short: "Not recording";
    not_recording_do: "Write masses and counts on paper until this banner is gone, then type them in.";
    lost: "No connection to the station.";
    signed_in: "Signed in:";
    nobody: "Nobody signed in";
    sound_on: "Sound on";
    sound_off: "Sound off";
    no_script: "This page does not renew itself in this browser. Reload it to see what is new.";
    live: "live";
    stale_since: "stale since";
    never_seen: "never seen";
    connected_waiting: "nothing heard yet";
    connected_silent: "silent";
    connected_wrong_language: "not understood";
    connected_port_lost: "unplugged";
    since: "What you see is from {} and may have changed.";
    ago: "{} min";
    owed_for: "owed for {} min";
    done: "Done.";
    sending: "Sending …";
    unreachable: "The station did not answer. Nothing was recorded: try again when the connection is back.";
    close: "Close";
    pad: "Keys on the screen";
    pad_open: "Keys on the screen";
    pad_space: "Space";
    pad_back: "Delete";
    pad_enter: "Enter";
    typed: "typed";
    who: "Who (initials)";
    why: "Why";
    pin: "PIN";
    usual_reasons: "Usual reasons";
    // The bench.
    bench: "Bench";
    bench_title: "Bench {}";
    code_label: "Code";
    code_hint: "Scan or type";
    code_ready: "Ready for a scan";
    code_away: "Scans go elsewhere now: press Escape";
    enter: "Enter";
    no_instruments: "No instrument is configured.";
    balance_named: "Balance {}";
    cup_named: "Cup {}";
    steady: "steady";
    moving: "moving";
    unmarked: "not marked";
    shared_with: "Shared with {}";
    rate_wanted: "wanted {}–{}";
    owed_overdue: "The slice is owed since";
    tie_or_explain: "Tie or explain";
    recorded: "Just recorded";
    nothing_recorded: "Nothing yet.";
    earlier: "Earlier";
    tied_to_nothing: "tied to nothing";
    set_aside: "set aside";
    undo: "Undo";
    intentions: "What the bench works on";
    person_sees: "What only a person sees";
    key_liquid: "Liquid limit";
    key_plastic: "Plastic limit";
    key_natural: "Natural water";
    key_specimen: "Specimen";
    key_container: "Container";
    key_slid: "Soil slid";
    key_tore: "Groove tore";
    key_new_paste: "New paste";
    key_not_obtainable: "No limit";
    key_by_hand: "By hand";
    in_work: "in work";
    specimen_first: "Choose a specimen first";
    after_a_count: "Possible after a count";
    choose_specimen: "Choose a specimen";
    choose_container: "Choose a container";
    choose_container_says: "The container you touch is in hand: put it on the pan.";
    open_another: "Open another specimen";
    no_specimen_open: "No specimen is open.";
    no_containers: "No container is known yet: read the code of one and weigh it empty.";
    not_obtainable_title: "A limit cannot be obtained";
    which_limit: "Which limit";
    record_not_obtainable: "Record: not obtainable";
    by_hand_title: "Read by eye, typed by hand";
    by_hand_says: "For a hand cup or a balance without a cable. What is typed here stays marked as typed.";
    type_drops: "A count";
    type_mass: "A mass";
    drops_counted: "Drops counted";
    mass_in_grams: "Mass in grams";
    record_count: "Record count";
    record_mass: "Record mass";
    specimen_in_work: "Specimen in work";
    no_specimen_in_work: "None. Read a specimen's code, or choose one with the key below.";
    so_many_of: "{} of {}";
    liquid_trials: "Liquid trials";
    threads: "Threads";
    no_trials: "No determination has begun.";
    waits_for_oven: "awaited";
    // Advice.
    advice: "Advice";
    advice_nothing: "Nothing is missing for the limits in work.";
    advice_no_work: "Advice comes when a limit is in work.";
    threads_needed: "Containers with threads still needed: {}.";
    paste_mass: "Paste in the dish, grams";
    water_to_add: "Water to add:";
    water_from: "Slope of {}. Add less first, mix, count again.";
    // Cautions.
    caution_cam: "Keep fingers and sleeves from the moving cam.";
    caution_hot: "Oven and containers at 110 °C burn: use tongs, cool with the lid on, weigh only what is cool.";
    caution_dust: "Dust from dry soil can carry silica or asbestos: do not raise it.";
    // The oven shelf.
    shelf_empty: "Nothing is drying.";
    all_in: "All {} wet ones into the oven at {} °C";
    all_out: "All {} ready ones out of the oven";
    place_wet: "wet, not in the oven";
    place_out: "out, to be weighed dry";
    place_drying: "weighed, not yet dry by the method";
    place_dry: "dry";
    due_not_yet: "in the oven";
    due_ready: "ready: weigh it dry";
    due_overdue: "overdue: weigh it dry";
    hours_of: "{} of {} h.";
    in_since: "In since";
    wet_since: "Wet since";
    out_since: "Out since";
    oven_not_recorded: "Not recorded: counted from the wet weighing.";
    ready_at: "Ready";
    put_in: "Into oven, {} °C";
    put_in_of: "{} into the oven at {} °C";
    take_out: "Out of oven";
    take_out_of: "{} out of the oven";
    oven: "Oven";
    celsius: "Temperature, °C";
    set_celsius: "Use for the next";
    celsius_wanted: "The method wants {} to {} °C.";
    oven_off_now: "The oven is off now";
    oven_is_off: "The oven is off since";
    oven_on_again: "On again";
    oven_was_off: "The oven was off";
    oven_off_says: "Time without heat is taken from the hours of what was in the oven.";
    from: "From";
    to: "To";
    record_oven_off: "Record outage";
    // Loose things and corrections.
    loose_title: "Tied to nothing";
    loose_says: "Weighings and counts that fitted nothing. Tie each to what it is of, or set it aside with a reason.";
    nothing_loose: "Everything is tied.";
    tie: "Tie";
    set_aside_do: "Set aside";
    trace_caption: "The balance around this moment";
    weighing: "Weighing";
    count: "Count";
    by_instrument: "by {}";
    at_bench: "at bench {}";
    by_person: "by {}";
    by_nobody: "nobody signed in";
    fact_no: "no. {}";
    correct_title: "Correct";
    correct_says: "What is wrong? Who and why are kept, and what stood here before stays in the record.";
    before: "Before";
    wrong_container_or_role: "Wrong container or role";
    wrong_mass: "Wrong mass";
    wrong_specimen: "Wrong specimen";
    wrong_drops: "Wrong number of drops";
    leave_unchanged: "Leave it unchanged";
    original_stays: "Stays in the record:";
    container: "Container";
    specimen: "Specimen";
    role_label: "What the mass is of";
    record_tie: "Record tie";
    record_set_aside: "Record set aside";
    record_correction: "Record correction";
    set_aside_says: "It no longer counts, and stays in the record with the reason.";
    was: "Recorded: {}";
    why_slid: "the soil slid in the cup instead of flowing";
    why_tore: "the groove tore";
    why_new_paste: "a new paste was made";
    why_crumbles: "the thread crumbled at every water content tried";
    why_slides: "the soil slides in the cup instead of flowing";
    why_too_fast: "the groove closed at fewer than 25 drops at every water content tried";
    why_oven_off: "the oven was off";
    why_power: "there was no power";
    why_door: "the door stood open";
    why_other_specimen: "it was of another specimen";
    why_nothing_in_work: "no specimen was in work";
    why_wrong_code: "the wrong code was read";
    why_no_code: "no code was read";
    why_other_role: "the mass is of something else";
    why_not_zero: "the balance was not at zero";
    why_warm: "the container was warm";
    why_spilled: "soil was spilled";
    why_try_out: "it was a try-out";
    why_misread: "it was misread";
    why_display: "the display showed another value";
    why_looked: "looked into, the value stands";
    why_repeated: "repeated with the same outcome";
    why_soil: "this soil behaves so";
    role_tare: "empty";
    role_tare_check: "empty, checked";
    role_tare_with_lid: "empty with lid";
    role_wet: "wet";
    role_repeat: "wet, repeated";
    role_grown: "wet, more threads";
    role_dry: "dry";
    role_further_dry: "dry again";
    role_emptied: "emptied";
    standing_unknown: "empty mass unknown";
    standing_free: "free";
    standing_wet: "wet";
    standing_in_oven: "in the oven";
    standing_drying: "drying";
    standing_dry: "dry";
    // A specimen.
    specimen_title: "Specimen {}";
    opened: "Opened";
    state: "State";
    state_provisional: "provisional";
    state_complete: "complete";
    state_reviewed: "reviewed";
    revision: "revision {}";
    print: "Print";
    liquid_limit: "Liquid limit";
    plastic_limit: "Plastic limit";
    plasticity_index: "Plasticity index";
    non_plastic: "non-plastic";
    group: "Group";
    natural_water: "Natural water, %";
    liquidity: "Liquidity index";
    consistency: "Consistency index";
    flow_index: "Flow index";
    activity: "Activity";
    not_yet: "not yet";
    not_obtainable_because: "not obtainable: {}";
    standard_uncertainty: "(u)";
    index_values: "Index values. Design and classification decisions belong to a licensed practitioner; the laboratory's method and edition prevail.";
    checks: "Checks";
    no_checks: "No check has anything to say.";
    hold: "hold";
    note: "note";
    answered: "Answered:";
    answer: "Answer";
    answer_again: "Answer anew";
    your_answer: "Your answer";
    record_answer: "Record answer";
    trials: "Determinations";
    trial: "Trial";
    trial_liquid: "Liquid {}";
    trial_thread: "Thread {}";
    trial_natural: "Natural {}";
    drops_head: "Drops";
    rate: "Drops/s";
    tare_g: "Empty, g";
    wet_g: "Wet, g";
    dry_g: "Dry, g";
    lid_g: "Lid, g";
    water: "Water, %";
    used_head: "Used";
    used: "used";
    not_used: "not used";
    correct: "Set aside";
    tare_owed: "owed";
    other_counts: "Counts without a slice";
    flow_x: "drops (logarithmic)";
    flow_y: "water, %";
    flow_caption: "Flow line; the limit is read at 25 drops.";
    flow_band: "Band: 95 % by these trials alone.";
    flow_said: "Flow line of {}: {} points; water content at 25 drops {} percent.";
    flow_said_no_line: "Flow line of {}: {} points, {} trials wait for the oven; no line yet.";
    chart_x: "liquid limit";
    chart_y: "plasticity index";
    chart_caption: "Plasticity chart, with {} other specimens of the laboratory.";
    chart_said: "Plasticity chart: {} at liquid limit {}, plasticity index {}.";
    chart_said_none: "Plasticity chart: {} has no point yet.";
    a_line: "A-line";
    u_line: "U-line";
    trace_said: "Balance from {} to {} seconds around the weighing, between {} and {} grams.";
    review: "Review";
    review_says: "You looked at every determination and answer, and did not weigh for this specimen yourself.";
    record_review: "Record review";
    reviewed_says: "A second person has reviewed this result.";
    review_not_yet: "A second person can review the result when it is complete.";
    history: "History";
    no_history: "Nothing was changed.";
    correction: "correction";
    ledger_head: "Ledger at printing:";
    // The laboratory.
    benches: "Benches";
    open_specimens: "Open specimens";
    open_specimen: "Open a specimen";
    results_of_day: "Results of the day";
    no_results: "No result yet today.";
    holds_open: "{} to answer";
    instruments: "Instruments";
    kind_balance: "balance";
    kind_counter: "cup counter";
    kind_scanner: "scanner";
    last_heard: "Last heard";
    never_heard: "Never heard";
    not_understood: "{} lines not understood";
    due_checks: "Checks that are due";
    no_due_checks: "No check of equipment is planned.";
    overdue: "overdue";
    not_due: "not due";
    last_done: "Last done";
    never_done: "Never done";
    due_at: "Due";
    backup_proven: "Backup last proven by restoring it:";
    never: "never.";
    backup_do: "A backup that was never restored proves nothing.";
    register: "Register of containers";
    weighed_empty: "Weighed empty";
    description: "Description";
    preparation: "Preparation";
    method: "Method";
    clay_percent: "Clay, % (may be left out)";
    fines_percent: "Passing 0.075 mm, % (may be left out)";
    record_specimen: "Open it";
    import: "Import";
    import_says: "Each line is shown and checked first; nothing is taken before you say so.";
    import_what: "What the file holds";
    import_containers: "Containers for the register";
    import_specimens: "The day's specimens";
    import_columns: "First line: names of the columns. Containers: container, tare_g, lid_g. Specimens: specimen, method, edition, description, preparation, passing_75um_percent, clay_percent, wanted. Only the first is needed. With commas and decimal points, in UTF-8.";
    import_file: "A file";
    import_text: "or its text";
    import_look: "Look at it";
    import_counts: "{} lines can be taken, {} cannot.";
    import_whole: "A list is taken whole or not at all: mend these lines and bring it again.";
    line: "Line";
    import_read_as: "Read as";
    import_verdict: "Verdict";
    import_refused: "left out";
    import_taken: "will be taken";
    import_take: "Take {} lines";
    import_leave: "Take nothing";
    // The door.
    sign_in: "Sign in";
    initials_or_badge: "Initials, or scan a badge";
    people: "People of the laboratory";
    badge_says: "A badge names you; the PIN proves it.";
    locked_until: "Too many tries. No further try before";
    sign_out: "Sign out {}";
    problem: "That did not work";
    to_the_start: "To the start";
    // What happened, in a history.
    did_opened: "opened";
    did_weighed: "weighed";
    did_counted: "counted";
    did_tied: "tied";
    did_superseded: "no slice was taken after a count";
    did_set_aside: "set aside";
    did_amended_mass: "mass corrected";
    did_amended_drops: "drops corrected";
    did_into_oven: "into the oven:";
    did_out_of_oven: "out of the oven:";
    did_not_obtainable: "not obtainable:";
    did_limits: "limits computed, revision {}";
    did_answered: "check answered:";
    did_reviewed: "reviewed, revision {}";
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn places_are_filled_in_turn_and_never_panic() {
        assert_eq!(fill("{} of {}", &["2", "3"]), "2 of 3");
        assert_eq!(fill("{} of {}", &["{}"]), "{} of ");
        assert_eq!(fill("none", &["a"]), "none");
    }

    #[test]
    fn every_role_standing_and_state_has_a_word() {
        for role in ROLES {
            assert!(!ENGLISH.role(role).contains('_'), "{role}");
        }
        for standing in ["unknown", "free", "wet", "in_oven", "drying", "dry"] {
            assert!(!ENGLISH.standing(standing).contains('_'));
        }
        assert_eq!(ENGLISH.role("something new"), "something new");
    }
}
