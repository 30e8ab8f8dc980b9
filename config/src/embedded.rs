//! The files that come inside the program.

macro_rules! files {
    ($folder:literal: $($name:literal),* $(,)?) => {
        &[$((concat!($folder, "/", $name, ".toml"), include_str!(concat!("../", $folder, "/", $name, ".toml")))),*]
    };
}

/// File name and text of every shipped method.
pub(crate) const METHODS: &[(&str, &str)] = files!(
    "methods": "d4318-multipoint", "d4318-one-point", "t89-t90", "iso17892-cup", "is2720-cup", "bs1377-cone", "iso17892-cone-80",
    "iso17892-cone-60",
);

/// File name and text of every shipped profile.
pub(crate) const PROFILES: &[(&str, &str)] = files!(
    "profiles": "signed-steady", "plain-stream", "slip-gross-net", "asked-long", "comma-stream", "framed-xor",
    "print-line", "drop-line", "running-total", "byte-per-drop", "contact-closure", "plain-code", "framed-code",
);
