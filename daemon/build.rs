//! Rebuilds when a migration is added: they are embedded in the program.

fn main() {
    println!("cargo:rerun-if-changed=../migrations");
}
