//! Primary-beam-corrected mosaics from interferometer visibilities, with weight maps, to a stated tolerance.
//!
//! # The measurement equation
//!
//! Stations p and q, at r_p and r_q, see point sources of flux densities S_s through their own voltage patterns g_p and g_q:
//!
//! > V_pq = Σ_s S_s A_pq(s) exp(−2πi (u l + v m + w (n − 1))),  A_pq = g_p g_q*,
//!
//! (u, v, w) being r_q − r_p in wavelengths and (l, m, n) direction cosines about a centre. Patterns differ from station to
//! station, turn with parallactic angle, shrink with frequency, and sit where the station really points. The adjoint of
//! this equation, weighted and summed over *all* visibilities k of all pointings, gives two images:
//!
//! > N(l, m) = Σ_k ω_k Re[A_k* V_k exp(+2πi (u_k l + v_k m + w_k (n − 1)))],  W(l, m) = Σ_k ω_k |A_k|².
//!
//! N/W is the mosaic on an even flux scale; with natural weights W is its inverse variance. All signs and units are on one
//! page, `docs/conventions.md`.
//!
//! # Two responses
//!
//! [`response::Response`] is that pair, `predict` and `adjoint`. [`response::Exact`] sums directly, in double precision:
//! slow, obvious, and the judge. [`response::Gridded`] does the same through windows, screens and Fourier transforms, with
//! relative L2 errors of N and of W below a tolerance that the caller states. Nothing above knows which of the two it
//! holds; every test, and the self-check of every run, is one against the other.
//!
//! # The path of data
//!
//! ```text
//! run file ──► observation ──► beam ──► response ──► imaging ──► measure ──► report
//!   (TOML)     visibilities   patterns   N and W      mosaic     sources     FITS, PNG, HTML, JSON
//! ```
//!
//! One direction, no way back: a folder imports only from folders before it, and from the ground floor.
//!
//! | folder | what lives there |
//! |---|---|
//! | [`sky`] | ground floor: directions, projection, pixel grid, point sources |
//! | [`fits`] | ground floor: FITS headers, images, tables, random groups; knows nothing of interferometry |
//! | [`run`] | the run file: keys, defaults, complaints with file, line and key |
//! | [`observation`] | visibilities in blocks, stations, time and parallactic angle; readers, writer, invented observations |
//! | [`beam`] | voltage patterns, and which station has which |
//! | [`response`] | predict and adjoint: exact, gridded |
//! | [`imaging`] | pointings summed to a mosaic, weight map, point spread function, self-check |
//! | [`measure`] | sources found, fitted, and their flux densities straight from visibilities, with errors |
//! | [`report`] | everything a person or another program reads |
//! | [`cli`] | arguments, progress, one file a command |
//!
//! # An example
//!
//! Three stations without beams watch a source of 2.5 Jy, and the adjoint returns its flux density.
//!
//! ```
//! use evensky::beam::{StationBeam, StationBeams, Unity};
//! use evensky::observation::{Hand, MemorySource, Mount, Schedule, Site, Station};
//! use evensky::response::{Exact, Response};
//! use evensky::sky::{Component, Direction, ImageGeometry};
//! use std::sync::Arc;
//!
//! # fn main() -> Result<(), Box<dyn std::error::Error>> {
//! let site = Site::new(-0.5, 0.8, 0.0).ok_or("no place")?;
//! let station = |name: &str, east_north_up_m| Station {
//!     name: name.into(),
//!     position_m: site.to_earth(east_north_up_m),
//!     mount: Mount::AltAzimuth,
//!     diameter_m: None,
//!     feed_angle: 0.0,
//! };
//! let schedule = Schedule {
//!     array_name: "THREE".into(),
//!     stations: vec![
//!         station("A", [0.0, 0.0, 0.0]),
//!         station("B", [120.0, 15.0, 0.0]),
//!         station("C", [-40.0, 90.0, 1.0]),
//!     ],
//!     mjd_utc: vec![61_000.0, 61_000.1],
//!     frequencies_hz: vec![1.4e9],
//!     width_hz: 1e6,
//!     hands: vec![Hand::XX, Hand::YY],
//!     weight: 1.0,
//! };
//! let aim = Direction::from_deg(80.0, 50.0);
//! let (observation, block) = schedule.pointing("field", aim);
//! let beam = StationBeam { pattern: Arc::new(Unity), offset: [0.0; 2], beam_name: "none".into() };
//! let beams = StationBeams::new(&observation, vec![beam; 3], None);
//!
//! let geometry = ImageGeometry::new(aim, 64, 64, 1e-4)?;
//! let response = Exact::new(&observation, beams, geometry);
//! let place = Direction::from_deg(80.03, 50.01);
//! let source =
//!     Component { name: "S".into(), direction: place, flux_jy: 2.5, reference_hz: 1.4e9, spectral_index: -0.7 };
//! let mut blocks = vec![block];
//! response.predict(&[source], &mut blocks)?;
//!
//! let mut visibilities = MemorySource::new(observation, blocks);
//! let (n, w) = response.adjoint_at(&mut visibilities, &[place])?[0];
//! assert!((n / w - 2.5).abs() < 1e-6); // visibilities are kept in single precision
//! # Ok(())
//! # }
//! ```
#![warn(missing_docs)]

pub mod beam;
pub mod cli;
pub mod fits;
pub mod imaging;
pub mod measure;
pub mod observation;
pub mod report;
pub mod response;
pub mod run;
pub mod sky;
