//! Messages, word for word. The expected texts are written by hand.

use super::{FULL, mistakes, read};

#[test]
fn ten_mistakes_are_told_at_once() {
    let text = include_str!("../sites/ten_mistakes.toml");
    let told = format!("{}\n", read(text).unwrap_err());
    assert_eq!(told, include_str!("../sites/ten_mistakes.txt"));
}

/// Line and column of the only place where `needle` stands.
#[track_caller]
fn position(text: &str, needle: &str) -> String {
    assert_eq!(text.matches(needle).count(), 1, "{needle} must stand once");
    let before = text.split(needle).next().unwrap();
    let line = before.lines().count().max(1) + usize::from(before.ends_with('\n'));
    let column = before.chars().rev().take_while(|c| *c != '\n').count() + 1;
    format!("{line}:{column}")
}

/// Replaces one piece of the whole file and expects exactly one mistake, at `place`.
#[track_caller]
pub(super) fn one(from: &str, to: &str, place: &str, expected: &str) {
    assert_eq!(FULL.matches(from).count(), 1, "{from} must stand once");
    let text = FULL.replace(from, to);
    let told: Vec<String> = mistakes(&text).iter().map(ToString::to_string).collect();
    assert_eq!(told, [format!("{}: {expected}", position(&text, place))]);
}

#[test]
fn unknown_keys_name_the_nearest() {
    one(
        "false_alarms = ",
        "false_alarm = ",
        "false_alarm = ",
        "watch: false_alarm\n    unknown key\n    mend: did you mean `false_alarms`?",
    );
    // A slip in a key that must be there is one mistake, not two.
    one(
        "radius = ",
        "raduis = ",
        "raduis = ",
        "well \"I-1\": raduis\n    unknown key\n    mend: did you mean `radius`?",
    );
    one(
        "[http]",
        "[htp]",
        "htp]",
        "htp\n    unknown key\n    mend: did you mean `http`?",
    );
    one(
        "skin = 1.5",
        "colour = \"red\"",
        "colour",
        "well \"I-1\": colour\n    unknown key\n    mend: leave it out; known here: at, layer, meter, name, past, radius, rate, skin, storage, trace",
    );
    one(
        "type = \"f32\"",
        "typ = \"f32\"",
        "typ =",
        "source \"skid\", channel \"i1.flow\": register.typ\n    unknown key\n    mend: did you mean `type`?",
    );
}

#[test]
fn what_is_missing_is_told_at_its_heading() {
    one(
        "viscosity = \"0.62 cP\"\n",
        "",
        "[[layer]]",
        "layer \"lower sand\"\n    the transmissivity is not known\n    mend: add `viscosity`",
    );
    one(
        "channel = \"o2.pressure\"\n",
        "",
        "[[gauge]]",
        "gauge \"O-2\"\n    `channel` is missing\n    mend: add channel = \"…\", the channel of its pressure",
    );
    one(
        "author = \"initials and date\"\n",
        "",
        "[[limit]]",
        "limit 1\n    `author` is missing\n    mend: add author = \"initials and date\", of who set the number",
    );
}

#[test]
fn values_of_another_type_say_what_is_due() {
    one(
        "skin = 1.5",
        "skin = \"1.5\"",
        "\"1.5\"",
        "well \"I-1\": skin = \"1.5\"\n    a finite number is due, and this is text\n    mend: write it bare, without quotes or unit",
    );
    one(
        "at = [\"310 m\", \"-480 m\"]",
        "at = \"310 m, -480 m\"",
        "\"310 m, -480 m\"",
        "gauge \"O-2\": at = \"310 m, -480 m\"\n    a place is a pair of lengths\n    mend: write [\"310 m\", \"-480 m\"]: east, then north, of the local origin",
    );
    one(
        "[edge]",
        "[[edge]]",
        "[[edge]]",
        "edge = [[edge]]\n    one table is due, and this is a list\n    mend: write it once, under the heading [edge]",
    );
    one(
        "[[limit]]",
        "[limit]",
        "[limit]",
        "limit = [limit]\n    a list of tables is due, and this is a table\n    mend: write the heading as [[limit]], once for each",
    );
    one(
        "baud = 19200",
        "baud = \"19200\"",
        "\"19200\"",
        "source \"skid\": baud = \"19200\"\n    a whole number from 50 to 4000000 is due\n    mend: write it bare, without quotes",
    );
}

#[test]
fn numbers_out_of_bounds_say_the_bounds() {
    one(
        "radius = \"0.11 m\"",
        "radius = \"0 m\"",
        "\"0 m\"\nskin",
        "well \"I-1\": radius = \"0 m\"\n    a length here must be more than zero\n    mend: such as \"18 m\"",
    );
    one(
        "lateness = \"2 min\"",
        "lateness = \"2 yr\"",
        "\"2 yr\"",
        "watch: lateness = \"2 yr\"\n    it must lie between 0 s and 7 d\n    mend: choose a time between them",
    );
    one(
        "\"1 per 5 years\"",
        "\"hardly ever\"",
        "\"hardly ever\"",
        "watch: false_alarms = \"hardly ever\"\n    a number of false alarms per time is due\n    mend: write \"1 per 5 years\" or \"2 per yr\"",
    );
    one(
        "porosity = 0.21",
        "porosity = 21",
        "21\ncompress",
        "layer \"lower sand\": porosity = 21\n    a porosity is a share of the rock, below one\n    mend: such as 0.21 or \"21 %\"",
    );
}

#[test]
fn references_name_what_there_is() {
    one(
        "channel = \"o2.pressure\"",
        "channel = \"o2.presure\"",
        "\"o2.presure\"",
        "gauge \"O-2\": channel = \"o2.presure\"\n    no source has a channel of this name\n    mend: add a [[source.channel]] with id = \"o2.presure\"",
    );
    one(
        "rate = \"i1.flow\"",
        "rate = \"i1.pressure\"",
        "\"i1.pressure\"",
        "well \"I-1\": rate = \"i1.pressure\"\n    a channel of kind rate is due, and this one of source \"field broker\" is of kind pressure\n    mend: name another channel, or give it kind = \"rate\"",
    );
    one(
        "gauge = \"O-2\"",
        "gauge = \"O2\"",
        "\"O2\"",
        "limit 1: gauge = \"O2\"\n    \"O2\" is no [[gauge]]\n    mend: did you mean \"O-2\"? there is \"O-2\"",
    );
}

#[test]
fn what_is_not_in_this_build_is_refused() {
    one(
        "[[publish]]\nkind = \"mqtt\"",
        "[[publish]]\nkind = \"webhook\"",
        "\"webhook\"",
        "publish 1: kind = \"webhook\"\n    a webhook is not in this build\n    mend: take mqtt, or leave this [[publish]] out",
    );
}

#[test]
fn a_zone_needs_an_area_and_a_property() {
    let zone = |rest: &str| format!("[[zone]]\nname = \"channel\"\n{rest}\n\n[[barrier]]");
    one(
        "[[barrier]]",
        &zone(
            "outline = [[\"0 m\", \"1 km\"], [\"1 km\", \"1 km\"], [\"2 km\", \"1 km\"]]\ntransmissivity = \"3 m2/d\"",
        ),
        "[[\"0 m\", \"1 km\"]",
        "zone \"channel\": outline = [[\"0 m\", \"1 km\"], [\"1 km\", \"1 km\"], [\"2 km\", \"1 km\"]]\n    an outline encloses an area\n    mend: give it three corners or more, in order; the last joins the first",
    );
    one(
        "[[barrier]]",
        &zone("outline = [[\"0 m\", \"1 km\"], [\"1 km\", \"1 km\"], [\"1 km\", \"2 km\"]]"),
        "[[zone]]\nname",
        "zone \"channel\"\n    nothing tells it from its layer\n    mend: give `transmissivity`, `permeability`, `storativity` or another property of the rock",
    );
    one(
        "[[barrier]]",
        &zone(
            "layer = \"upper sand\"\noutline = [[\"0 m\", \"1 km\"], [\"1 km\", \"1 km\"], [\"1 km\", \"2 km\"]]\npermeability = \"10 mD\"",
        ),
        "\"upper sand\"",
        "zone \"channel\": layer = \"upper sand\"\n    \"upper sand\" is no [[layer]]\n    mend: did you mean \"lower sand\"? there is \"lower sand\"",
    );
}

#[test]
fn a_fluid_and_a_direction_are_checked() {
    one(
        "viscosity = \"0.62 cP\"",
        "fluid = { temperature = \"60 degC\", pressure = \"150 MPa\" }",
        "{ temperature",
        "layer \"lower sand\": fluid = { temperature = \"60 degC\", pressure = \"150 MPa\" }\n    the formulas for water and brine do not reach it: pressure of water is 150000000, but it must lie from 0.1 MPa (1.6 MPa above 99 degC) to 100 MPa\n    mend: mend it, or leave `fluid` out and give `viscosity` and `compressibility`",
    );
    one(
        "viscosity = \"0.62 cP\"",
        "viscosity = \"0.62 cP\"\nanisotropy = { ratio = 0.25, azimuth = \"30 deg\" }",
        "0.25",
        "layer \"lower sand\": anisotropy.ratio = 0.25\n    the greatest transmissivity over the least lies from 1 to 100\n    mend: give the direction that conducts best as the azimuth",
    );
}

#[test]
fn topics_must_not_mix_gauges() {
    one(
        "topic = \"pads/{gauge}/p\"",
        "topic = \"pads/+/p\"",
        "\"pads/+/p\"",
        "source \"field broker\", channel \"{gauge}.pressure\": topic = \"pads/+/p\"\n    a wildcard has no name here, so one channel would mix several gauges\n    mend: put a placeholder in its place, such as pads/{gauge}/p, and the same one in `id`",
    );
    one(
        "topic = \"pads/{gauge}/p\"",
        "topic = \"{pad}/{gauge}/p\"",
        "\"{pad}/{gauge}/p\"",
        "source \"field broker\", channel \"{gauge}.pressure\": topic = \"{pad}/{gauge}/p\"\n    the placeholder {pad} is not in `id`, so one channel would mix several gauges\n    mend: put {pad} in `id` too",
    );
    one(
        "value = \"/p\"",
        "value = \"p\"",
        "\"p\"  ",
        "source \"field broker\", channel \"{gauge}.pressure\": value = \"p\"\n    a JSON Pointer (RFC 6901) is due\n    mend: start it with /, such as value = \"/p\"",
    );
}

#[test]
fn secrets_do_not_belong_in_the_file() {
    one(
        "password_file = \"broker.secret\"",
        "password = \"hunter2\"",
        "password = ",
        "source \"field broker\": password\n    the site file holds no secret\n    mend: put the password in a file of its own and name it: password_file = \"broker.secret\"",
    );
    one(
        "\"mqtt://127.0.0.1:1883\"",
        "\"mqtt://a@127.0.0.1:1883\"",
        "\"mqtt://a@127.0.0.1:1883\"",
        "publish 1: url = \"mqtt://a@127.0.0.1:1883\"\n    the site file holds no secret\n    mend: use `user` and `password_file`",
    );
}

#[test]
fn things_that_must_be_apart_are() {
    one(
        "at = [\"310 m\", \"-480 m\"]",
        "at = [\"5 cm\", \"0 m\"]",
        "[\"5 cm\"",
        "gauge \"O-2\": at = [\"5 cm\", \"0 m\"]\n    it sits inside well \"I-1\"\n    mend: write well = \"I-1\" in place of `at`",
    );
    one(
        "distance = \"12 km\"",
        "distance = \"200 m\"",
        "\"200 m\"",
        "edge: distance = \"200 m\"\n    well \"I-1\" lies 286 m from the centre of wells and gauges\n    mend: put the edge outside it, or move it",
    );
    one(
        "line = [[\"1.4 km\", \"-2 km\"], [\"1.6 km\", \"2.5 km\"]]",
        "line = [[\"-1 km\", \"-1 km\"], [\"1 km\", \"1 km\"]]",
        "[\"0 m\", \"0 m\"]",
        "well \"I-1\": at = [\"0 m\", \"0 m\"]\n    it stands on barrier \"east fault\"\n    mend: move the well or the line to the side the well is on",
    );
}

#[test]
fn two_of_a_kind_are_told() {
    let twice = FULL.replace(
        "[[source]]\nname = \"field broker\"",
        "[[source]]\nname = \"skid\"\nkind = \"text-line\"\nport = \"/dev/ttyUSB0\"\n[[source.channel]]\nid = \"i1.flow\"\nkind = \"rate\"\nunit = \"L/s\"\nfield = 1\n\n[[source]]\nname = \"field broker\"",
    );
    let told: Vec<String> = mistakes(&twice).into_iter().map(|m| m.what).collect();
    assert_eq!(
        told,
        [
            "another source has this name",
            "source \"skid\" holds this port",
            "source \"skid\" has a channel of this name",
        ]
    );
    let shared = FULL.replace(
        "[[neighbour]]",
        "[[well]]\nname = \"I-2\"\nat = [\"900 m\", \"0 m\"]\nradius = \"0.1 m\"\nrate = { channel = \"i1.flow\", share = 0.4 }\n[[neighbour]]",
    );
    let told: Vec<String> = mistakes(&shared).into_iter().map(|m| m.what).collect();
    assert_eq!(
        told,
        ["the wells on this meter take more than the whole of it"]
    );
}

#[test]
fn lines_that_are_no_toml_are_told_with_the_rest() {
    let text = FULL
        .replace("viscosity = \"0.62 cP\"", "viscosity = 0.62 cP")
        .replace("noise = \"120 Pa\"", "noise = \"120\"");
    let told: Vec<String> = mistakes(&text).iter().map(ToString::to_string).collect();
    let viscosity = position(&text, "0.62 cP");
    let noise = position(&text, "\"120\"");
    assert_eq!(
        told,
        [
            format!(
                "{viscosity}: file\n    this is not TOML: string values must be quoted, expected literal string\n    mend: put the value in quotes: viscosity = \"0.62 cP\""
            ),
            format!(
                "{noise}: gauge \"O-2\": noise = \"120\"\n    a pressure needs a unit\n    mend: write \"120 Pa\" or another unit; pressure takes Pa, kPa, MPa, bar, mbar, psi, m H2O, ft H2O, mm H2O, mm Hg or atm"
            ),
        ]
    );
}

#[test]
fn a_key_that_stands_twice_is_told_at_the_second() {
    one(
        "skin = 1.5",
        "skin = 1.5\nskin = 2.5",
        "skin = 2.5",
        "file\n    this is not TOML: duplicate key\n    mend: keep one of the two; what comes several times has a heading like [[gauge]]",
    );
}

#[test]
fn layers_that_a_well_cannot_be_open_to_are_told() {
    one(
        "layer = \"lower sand\"\nradius = \"0.11 m\"",
        "radius = \"0.11 m\"\nlayer = [\"lower sand\", \"lower sand\"]",
        "\"lower sand\"]",
        "well \"I-1\": layer = \"lower sand\"\n    the layer is named twice\n    mend: name each layer once",
    );
    one(
        "layer = \"lower sand\"\nradius = \"0.11 m\"",
        "radius = \"0.11 m\"\nlayer = []",
        "[]",
        "well \"I-1\": layer = []\n    no layer is named\n    mend: name the layers it is open to",
    );
}
