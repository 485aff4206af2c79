//! Grounds that cannot be: one message each, which names the thing and the mend. Barriers that cross are told with the
//! mesh, by `check`.

use borewake_model::ground::EdgeKind;

use super::messages::one;
use super::{FULL, site};

#[test]
fn gauges_outside_the_edge() {
    one(
        "at = [\"310 m\", \"-480 m\"]",
        "at = [\"310 m\", \"-48 km\"]",
        "\"12 km\"",
        "edge: distance = \"12 km\"\n    well \"I-1\" lies 24001 m from the centre of wells and gauges\n    mend: put the edge outside it, or move it",
    );
}

#[test]
fn two_wells_in_one_place() {
    let half = "rate = { channel = \"i1.flow\", share = 0.5 }";
    let twin = format!(
        "[[well]]\nname = \"I-2\"\nat = [\"0 m\", \"0 m\"]\nradius = \"0.1 m\"\n{half}\n[[neighbour]]"
    );
    let text = FULL.replace("rate = \"i1.flow\"", half);
    let told = super::mistakes(&text.replace("[[neighbour]]", &twin));
    let [twin] = &told[..] else {
        panic!("{told:?}");
    };
    assert_eq!(twin.what, "well \"I-1\" stands at the same place");
    assert_eq!(
        twin.mend,
        "two wells in one layer must be apart by more than their radii"
    );
}

#[test]
fn a_well_on_a_barrier() {
    one(
        "line = [[\"1.4 km\", \"-2 km\"], [\"1.6 km\", \"2.5 km\"]]",
        "line = [[\"0 m\", \"-1 km\"], [\"0 m\", \"1 km\"]]",
        "[\"0 m\", \"0 m\"]",
        "well \"I-1\": at = [\"0 m\", \"0 m\"]\n    it stands on barrier \"east fault\"\n    mend: move the well or the line to the side the well is on",
    );
}

#[test]
fn a_layer_without_properties() {
    let text = FULL.replace(
        "permeability = \"110 mD\"           # or transmissivity = \"…\" and storativity = …\nthickness = \"22 m\"\nporosity = 0.21\ncompressibility = \"9.5e-10 /Pa\"\nviscosity = \"0.62 cP\"\n",
        "transmissivity = \"35 m2/d\"\n",
    );
    let told = super::mistakes(&text);
    let [mistake] = &told[..] else {
        panic!("{told:?}");
    };
    assert_eq!(mistake.key, "layer \"lower sand\"");
    assert_eq!(mistake.what, "the storativity is not known");
    assert!(mistake.mend.starts_with("give `storativity`"), "{mistake}");
}

#[test]
fn a_unit_of_the_wrong_kind() {
    let told = super::mistakes(&FULL.replace("thickness = \"22 m\"", "thickness = \"22 kPa\""));
    let [mistake] = &told[..] else {
        panic!("{told:?}");
    };
    assert_eq!(mistake.key, "layer \"lower sand\": thickness");
    assert_eq!(
        mistake.what,
        "\"kPa\" is a unit of pressure, and a length is due"
    );
    let takes = "length takes m, km, cm, mm, ft or in";
    assert!(mistake.mend.ends_with(takes), "{mistake}");
}

#[test]
fn a_trace_stands_for_a_place_and_takes_no_skin_below_zero() {
    let trace = FULL.replace(
        "at = [\"0 m\", \"0 m\"]",
        "trace = [[\"-100 m\", \"0 m\"], [\"100 m\", \"0 m\"], [\"100 m\", \"100 m\"]]",
    );
    let well = &site(&trace).ground.wells[0];
    assert_eq!(well.trace.len(), 3);
    assert_eq!(well.at, [50.0, 0.0]);
    one(
        "at = [\"0 m\", \"0 m\"]",
        "at = [\"0 m\", \"0 m\"]\ntrace = [[\"-100 m\", \"0 m\"], [\"100 m\", \"0 m\"]]",
        "at = [\"0 m\", \"0 m\"]",
        "well \"I-1\": at\n    a well with a trace is where its trace is\n    mend: keep `at` or `trace`, not both",
    );
    one(
        "at = [\"0 m\", \"0 m\"]\nlayer = \"lower sand\"\nradius = \"0.11 m\"\nskin = 1.5",
        "trace = [[\"-100 m\", \"0 m\"], [\"100 m\", \"0 m\"]]\nradius = \"0.11 m\"\nskin = -1.5",
        "-1.5",
        "well \"I-1\": skin = -1.5\n    a well with a trace takes no skin below zero\n    mend: its length says how well it is joined to the ground: state zero or more",
    );
}

const RIVER: &str = "[[stage]]\nname = \"river\"\nline = [[\"2 km\", \"-9 km\"], [\"2 km\", \"9 km\"]]\nconductance = \"1e-9 m3/(Pa s m)\"\nchannel = \"river.level\"\n[[barrier]]";
const LEVEL: &str = "[[source.channel]]\nid = \"river.level\"\nkind = \"stage\"\nunit = \"m\"\nunit_id = 4\nregister = { table = \"holding\", address = 102, type = \"f32\", order = \"big\" }\n\n[[source]]\nname = \"field broker\"";

#[test]
fn stages_and_a_driven_edge_are_inputs_after_the_wells() {
    let text = FULL
        .replace("[[barrier]]", RIVER)
        .replace("[[source]]\nname = \"field broker\"", LEVEL)
        .replace(
            "kind = \"open\" ",
            "kind = \"fixed\"\nstage = \"river.level\" ",
        );
    let site = site(&text);
    assert_eq!(site.ground.inputs(), 3);
    assert_eq!(site.ground.edge.kind, EdgeKind::Driven);
    let fed: Vec<(&str, f64)> = site.waters.iter().map(|w| (&*w.name, w.weight)).collect();
    assert_eq!(fed, [("river", 9_806.65), ("edge", 9_806.65)]);
    let plan = borewake::keeper::settings::block_plan(&site);
    let channels: Vec<&str> = plan.wells.iter().map(|w| &*w.channel.0).collect();
    assert_eq!(channels, ["i1.flow", "river.level", "river.level"]);
    assert_eq!(plan.wells[1].share, 9_806.65);
    assert!(site.notes.iter().all(|n| !n.key.contains("river")));

    one(
        "[[barrier]]",
        &RIVER.replace("river.level", "i1.flow"),
        "\"i1.flow\"\n[[barrier]]",
        "stage \"river\": channel = \"i1.flow\"\n    a channel of kind stage or pressure is due, and this one of source \"skid\" is of kind rate\n    mend: name another channel, or give it kind = \"stage\"",
    );
    one(
        "[[barrier]]",
        &RIVER
            .replace("1e-9", "0")
            .replace("river.level", "o2.pressure"),
        "\"0 m3/(Pa s m)\"\nchannel",
        "stage \"river\": conductance = \"0 m3/(Pa s m)\"\n    a conductance here must be more than zero\n    mend: such as \"2e-12 m3/(Pa s m)\"",
    );
    one(
        "kind = \"open\" ",
        "kind = \"open\"\nstage = \"o2.pressure\" ",
        "\"o2.pressure\"  ",
        "edge: stage = \"o2.pressure\"\n    only an edge of kind \"fixed\" follows a stage\n    mend: write kind = \"fixed\", or leave `stage` out",
    );
}
