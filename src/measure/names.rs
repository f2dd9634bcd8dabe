//! Names from places, after the IAU's rules: an acronym, J, right ascension and declination cut off, never rounded.

use super::Source;
use crate::sky::Direction;

/// `EV J101043+415147`: hours, minutes, seconds of right ascension and degrees, minutes, seconds of declination (ICRS), cut
/// off after whole seconds as the IAU's specifications for nomenclature ask.
pub fn position_name(direction: Direction) -> String {
    let (ra, dec) = direction.to_deg();
    // a hundred-thousandth of a second up: what is a whole second but for rounding is one
    let ra_s = ((ra * 240.0 + 1e-5).floor() as u64) % 86_400;
    let dec_s = (dec.abs() * 3600.0 + 1e-5).floor() as u64;
    let sign = if dec < 0.0 { '-' } else { '+' };
    format!(
        "EV J{:02}{:02}{:02}{sign}{:02}{:02}{:02}",
        ra_s / 3600,
        ra_s / 60 % 60,
        ra_s % 60,
        dec_s / 3600,
        dec_s / 60 % 60,
        dec_s % 60
    )
}

/// Gives every source the name of its place; of several with the same, each a letter as well, in their order.
pub fn name_sources(sources: &mut [Source]) {
    let names: Vec<String> = sources.iter().map(|s| position_name(s.direction)).collect();
    for (index, source) in sources.iter_mut().enumerate() {
        source.name = names[index].clone();
        if names.iter().filter(|&n| *n == names[index]).count() > 1 {
            let before = names[..index].iter().filter(|&n| *n == names[index]).count();
            source.name.push_str(&letters(before));
        }
    }
}

/// a, b, … z, ba, bb, …
fn letters(mut number: usize) -> String {
    let mut out = Vec::new();
    loop {
        out.push(b'a' + (number % 26) as u8);
        number /= 26;
        if number == 0 {
            break;
        }
    }
    out.reverse();
    String::from_utf8_lossy(&out).into_owned()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_are_cut_off_not_rounded() {
        for (ra, dec, name) in [
            (152.678, 41.863, "EV J101042+415146"),
            (0.0, 0.0, "EV J000000+000000"),
            (359.999_99, -0.000_4, "EV J235959-000001"),
            (180.0, -89.999_9, "EV J120000-895959"),
            (15.0, 1.5, "EV J010000+013000"),
        ] {
            assert_eq!(position_name(Direction::from_deg(ra, dec)), name, "{ra} {dec}");
        }
    }

    #[test]
    fn the_same_second_takes_letters() {
        let at = |ra| Source::at("", Direction::from_deg(ra, 10.0), 0.0);
        let mut sources = vec![at(15.0001), at(15.0002), at(20.0)];
        name_sources(&mut sources);
        let names: Vec<&str> = sources.iter().map(|s| s.name.as_str()).collect();
        assert_eq!(names, ["EV J010000+100000a", "EV J010000+100000b", "EV J012000+100000"]);
        assert_eq!([letters(25), letters(26)], ["z", "ba"]);
    }
}
