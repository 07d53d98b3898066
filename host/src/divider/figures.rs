//! The figures of one string at one voltage.

use super::network::{Network, parallel};

/// What one string does at one voltage.
#[derive(Clone, Debug, PartialEq)]
pub struct Figures {
    /// Ratio K, loading included.
    pub ratio: f64,
    /// Volts at the top for one code.
    pub volts_per_code: f64,
    /// Voltage at the tap, volts.
    pub tap_volts: f64,
    /// Code of the converter.
    pub code: f64,
    /// Current in the string, amperes.
    pub string_amperes: f64,
    /// Voltage across one element, volts.
    pub element_volts: f64,
    /// Power in one element, watts.
    pub element_watts: f64,
    /// Time constant of the filter, seconds.
    pub filter_seconds: f64,
    /// From a step to within 100 ppm of it, seconds.
    pub settle_100ppm_seconds: f64,
    /// Bandwidth at -3 dB, hertz.
    pub bandwidth_hz: f64,
    /// Voltage at the tap when the largest share of the low side is lost (one resistor open), volts; infinite with one only.
    pub tap_one_open_volts: f64,
}

/// Computes them; `volts` is at the top, positive.
pub fn figures(network: &Network, volts: f64) -> Figures {
    let (string, loaded, ratio) = (network.string_ohms(), network.loaded_ohms(), network.ratio());
    let string_amperes = volts / (string + loaded);
    let element_volts = string_amperes * network.element_ohms;
    let filter_seconds = parallel([string, loaded]) * network.filter_farads;
    Figures {
        ratio,
        volts_per_code: network.volts_per_code(),
        tap_volts: volts / ratio,
        code: volts / network.volts_per_code(),
        string_amperes,
        element_volts,
        element_watts: element_volts * string_amperes,
        filter_seconds,
        settle_100ppm_seconds: filter_seconds * libm::log(1e4),
        bandwidth_hz: 1.0 / (2.0 * std::f64::consts::PI * filter_seconds),
        tap_one_open_volts: one_open(network, volts),
    }
}

/// The tap with the low-side resistor open whose loss raises it most.
fn one_open(network: &Network, volts: f64) -> f64 {
    let least = network.low_ohms.iter().copied().fold(f64::INFINITY, f64::min);
    let mut lost = false;
    // Equal resistors: only one of them is lost.
    let left = network.low_ohms.iter().copied().filter(|ohms| {
        let this = !lost && *ohms == least;
        lost |= this;
        !this
    });
    let low = parallel(left.chain([network.input_ohms]));
    if network.low_ohms.len() < 2 { f64::INFINITY } else { volts * low / (low + network.string_ohms()) }
}

/// Seconds until `farads` have fallen from `volts` to `touch_volts` through resistors in parallel; infinite without any.
pub fn bleed_seconds(farads: f64, ohms: impl IntoIterator<Item = f64>, volts: f64, touch_volts: f64) -> f64 {
    if volts <= touch_volts {
        return 0.0;
    }
    parallel(ohms) * farads * libm::log(volts / touch_volts)
}

#[cfg(test)]
mod tests {
    use serde_json::Value;

    use super::*;

    fn number(entry: &Value, key: &str) -> f64 {
        entry[key].as_f64().unwrap()
    }

    fn network(entry: &Value) -> Network {
        Network {
            elements: entry["elements"].as_u64().unwrap() as u32,
            element_ohms: number(entry, "element_ohms"),
            low_ohms: entry["low_ohms"].as_array().unwrap().iter().map(|ohms| ohms.as_f64().unwrap()).collect(),
            input_ohms: number(entry, "input_ohms"),
            filter_farads: number(entry, "filter_farads"),
            full_scale_volts: 2.048,
            ..Network::default()
        }
    }

    /// Against what ngspice read from the same three networks: `tests/spice/figures.json`, which `tests/spice/run` makes.
    #[test]
    fn three_networks_agree_with_ngspice() {
        let path = std::path::Path::new(env!("CARGO_MANIFEST_DIR")).join("../tests/spice/figures.json");
        let json: Value = serde_json::from_str(&std::fs::read_to_string(path).unwrap()).unwrap();
        let networks = json["networks"].as_array().unwrap();
        assert_eq!(networks.len(), 3);
        for entry in networks {
            let (volts, part) = (number(entry, "volts"), network(entry));
            let found = figures(&part, volts);
            let close = |ours: f64, key: &str, relative: f64| {
                let spice = number(entry, key);
                assert!((ours / spice - 1.0).abs() < relative, "{} {key}: {ours} against {spice}", entry["name"]);
            };
            close(found.ratio, "ratio", 1e-6);
            close(found.tap_volts, "tap_volts", 1e-6);
            close(found.string_amperes, "string_amperes", 1e-6);
            close(found.settle_100ppm_seconds, "settle_100ppm_seconds", 2e-3);
            close(found.bandwidth_hz, "bandwidth_hz", 2e-3);
            let (farads, string) = (number(entry, "supply_farads"), part.string_ohms() + part.loaded_ohms());
            let touch = json["touch_volts"].as_f64().unwrap();
            let bleeder = number(entry, "bleeder_ohms");
            close(bleed_seconds(farads, [string, bleeder], volts, touch), "bleed_seconds", 2e-3);
            close(bleed_seconds(farads, [string], volts, touch), "bleed_without_bleeder_seconds", 2e-3);
        }
    }

    #[test]
    fn a_lost_resistor_doubles_the_tap_and_a_lone_one_is_the_last() {
        let mut part = Network {
            elements: 10,
            element_ohms: 20e6,
            low_ohms: vec![80e3, 80e3],
            input_ohms: 1e12,
            ..Network::default()
        };
        let found = figures(&part, 5000.0);
        assert!((found.tap_one_open_volts / found.tap_volts - 2.0).abs() < 1e-3);
        part.low_ohms.pop();
        assert_eq!(figures(&part, 5000.0).tap_one_open_volts, f64::INFINITY);
    }

    #[test]
    fn nothing_to_bleed_through_never_bleeds() {
        assert_eq!(bleed_seconds(1e-8, [], 5000.0, 60.0), f64::INFINITY);
        // 10 nF, 100 Mohm, 5 kV: 1 s times ln(83.3) = 4.42 s (worked by hand).
        assert!((bleed_seconds(1e-8, [1e8], 5000.0, 60.0) - 4.4228).abs() < 1e-3);
    }
}
