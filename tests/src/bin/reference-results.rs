//! Results for the checks against independent programs in `tests/reference`: a request as JSON on standard input, the
//! answer as JSON on standard output.

use std::{fs, io::Read, path::Path};

use ringvolt::{
    frames::{
        exposure_of,
        video::{Patch, patch_brightness},
    },
    metrology::{Averaging, Point, deviation, errors_in_both, solve},
    physics::wavelength_metres,
    profile::{self, Profile},
};
use serde_json::{Value, json};

fn main() {
    let mut text = String::new();
    std::io::stdin().read_to_string(&mut text).expect("standard input is text");
    let request: Value = serde_json::from_str(&text).expect("standard input is JSON");
    let answer = match request["what"].as_str().expect("a request says what") {
        "york" => york(&request),
        "polynomial" => polynomial(&request),
        "allan" => allan(&request),
        "wavelength" => json!(numbers(&request["volts"]).into_iter().map(wavelength_metres).collect::<Vec<_>>()),
        "exif" => exif(&request),
        "patch" => patch(&request),
        other => panic!("no results for {other}"),
    };
    println!("{answer}");
}

fn numbers(value: &Value) -> Vec<f64> {
    value.as_array().expect("a list").iter().map(|number| number.as_f64().expect("a number")).collect()
}

fn york(request: &Value) -> Value {
    let [x, u_x, y, u_y] = ["x", "u_x", "y", "u_y"].map(|name| numbers(&request[name]));
    let point = |i: usize| Point { x: x[i], u_x: u_x[i], y: y[i], u_y: u_y[i], correlation: 0.0 };
    let line = errors_in_both(&(0..x.len()).map(point).collect::<Vec<_>>()).expect("the points make a line");
    json!({
        "slope": line.slope, "intercept": line.intercept, "u_slope": line.u_slope, "u_intercept": line.u_intercept,
        "chi_square": line.chi_square,
    })
}

fn polynomial(request: &Value) -> Value {
    let [x, y, sigma] = ["x", "y", "sigma"].map(|name| numbers(&request[name]));
    let degree = request["degree"].as_i64().expect("a degree") as i32;
    let columns: Vec<Vec<f64>> = (0..=degree).map(|power| x.iter().map(|x| x.powi(power)).collect()).collect();
    let solution = solve(&columns, &y, &sigma).expect("the points make a curve");
    json!({ "coefficients": solution.coefficients, "covariance": solution.cofactors })
}

fn allan(request: &Value) -> Value {
    let values = numbers(&request["values"]);
    let factor = request["factor"].as_u64().expect("a factor") as usize;
    let of = |averaging| deviation(&values, factor, averaging);
    json!({ "adev": of(Averaging::Plain), "oadev": of(Averaging::Overlapping), "mdev": of(Averaging::Modified) })
}

fn exif(request: &Value) -> Value {
    let camera = Profile::parse(&profile::example(), "example").expect("the example is right").camera;
    let path = Path::new(request["file"].as_str().expect("a file"));
    let bytes = fs::read(path).expect("the file is there");
    match exposure_of(&bytes, 0, &camera) {
        Ok(exposure) => json!({
            "start_utc_ns": exposure.start_utc_ns, "end_utc_ns": exposure.end_utc_ns, "start_u_ns": exposure.start_u_ns,
        }),
        Err(why) => json!({ "unknown": why }),
    }
}

fn patch(request: &Value) -> Value {
    let video = fs::File::open(request["file"].as_str().expect("a file")).expect("the file is there");
    let patch: Patch = request["patch"].as_str().expect("a patch").parse().expect("a patch");
    let clip = patch_brightness(std::io::BufReader::new(video), patch).expect("the video is whole");
    json!({ "frame_seconds": clip.frame_seconds, "brightness": clip.brightness })
}
