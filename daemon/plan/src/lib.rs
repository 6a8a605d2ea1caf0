//! From the site file to what is swept, and from an answer to levels: the settings of the pure rooms, made once per cable.
//!
//! The service and the companion measure alike since both go through here.

#![forbid(unsafe_code)]

use hushwatch_config::site::{Cable, Floor, Instrument, ProbeKind, Site};
use hushwatch_instrument::{Segment, SweepAnswer, SweepPlan};
use hushwatch_quantity::{Quality, Reason, Span};
use hushwatch_signal as signal;
use hushwatch_signal::CurveError;

/// How often a cable is looked at if the site file does not say.
const EVERY: Span = Span::from_secs(10);

/// Video bandwidth over resolution bandwidth: wide enough not to smooth what the detector is to see (common practice).
const VIDEO_RATIO: f64 = 3.0;

/// Everything that is needed to look at one cable.
#[derive(Clone, Debug)]
pub struct CablePlan {
    /// The cable, by index in the site.
    pub cable: usize,
    /// How often it is looked at.
    pub every: Span,
    /// What the instrument is told.
    pub sweep: SweepPlan,
    /// How far its levels may be off.
    pub uncertainty: signal::Uncertainty,
    /// What of the site file bears on its levels, as lines `name = value`: levels are comparable only where it is the same.
    pub bearing: Vec<String>,
    bands: Vec<signal::Band>,
    /// Which band each segment belongs to.
    band_of: Vec<usize>,
    chain: signal::CorrectionChain,
    receiver: signal::Receiver,
}

impl CablePlan {
    /// The plan for a cable on an instrument that can sweep `most_points` at once.
    ///
    /// # Errors
    /// The tables of its probe make no curve.
    pub fn new(site: &Site, cable: usize, most_points: usize) -> Result<Self, CurveError> {
        let described = &site.cables[cable];
        let instrument = &site.instruments[described.instrument];
        let bands = bands(described, instrument);
        let segments = signal::plan_segments(&bands, most_points);
        let sweep = SweepPlan {
            input: described.input,
            segments: segments.iter().map(|segment| told(segment, &bands[segment.band], instrument)).collect(),
            settle: instrument.settle.to_duration(),
        };
        Ok(Self {
            cable,
            every: described.every.unwrap_or(EVERY),
            sweep,
            uncertainty: uncertainty(described, instrument),
            bearing: bearing(site, described),
            band_of: segments.iter().map(|segment| segment.band).collect(),
            bands,
            chain: chain(described)?,
            receiver: receiver(instrument),
        })
    }

    /// The level of each band from an answer; `None` where nothing of a band was measured.
    pub fn levels(&self, answer: &SweepAnswer) -> Vec<Option<signal::BandLevel>> {
        let mut given = Quality::GOOD;
        if !answer.settings.assumed().is_empty() {
            given.reason = Some(Reason::Assumed);
        }
        if answer.overload == Some(true) {
            given = given.worse(Quality::bad(Reason::Overload));
        }
        let of_band = |index: usize| {
            signal::band_level(&self.traces(index, answer), &self.chain, &self.bands[index], &self.receiver, given)
        };
        (0..self.bands.len()).map(of_band).collect()
    }
}

impl CablePlan {
    /// What carries each band: lines or noise; `None` where nothing of a band was measured.
    pub fn characters(&self, answer: &SweepAnswer) -> Vec<Option<signal::Character>> {
        let of_band = |index: usize| signal::character(&self.traces(index, answer), &self.chain, &self.bands[index]);
        (0..self.bands.len()).map(of_band).collect()
    }

    /// The traces that belong to a band.
    fn traces<'a>(&self, band: usize, answer: &'a SweepAnswer) -> Vec<signal::Trace<'a>> {
        (0..self.band_of.len())
            .filter(|segment| self.band_of[*segment] == band)
            .filter_map(|segment| {
                let swept = &self.sweep.segments[segment];
                let values = answer.segments.get(segment)?;
                Some(signal::Trace { start_hz: swept.start_hz, stop_hz: swept.stop_hz, unit: answer.unit, values })
            })
            .collect()
    }
}

fn told(segment: &signal::Segment, band: &signal::Band, instrument: &Instrument) -> Segment {
    Segment {
        start_hz: segment.start_hz,
        stop_hz: segment.stop_hz,
        points: u32::try_from(segment.points).unwrap_or(u32::MAX),
        rbw_hz: band.rbw_hz,
        shape: band.shape,
        vbw_hz: Some(VIDEO_RATIO * band.rbw_hz),
        detector: band.detector,
        dwell_s: instrument.dwell.as_secs_f64(),
    }
}

/// The bands of a cable as they are reduced to levels.
pub fn bands(cable: &Cable, instrument: &Instrument) -> Vec<signal::Band> {
    let band = |band: &hushwatch_config::site::Band| signal::Band {
        from_hz: band.from_hz,
        to_hz: band.to_hz,
        rbw_hz: band.rbw_hz,
        shape: instrument.shape,
        detector: band.detector,
        exclude: band.exclude.clone(),
    };
    cable.bands.iter().map(band).collect()
}

/// How far a level of a cable may be off, by what the site file tells of its chain and common practice for the rest.
pub fn uncertainty(cable: &Cable, instrument: &Instrument) -> signal::Uncertainty {
    use signal::uncertainty as known;
    let attenuated = instrument.attenuation_db.is_some_and(|db| db >= 10.0);
    signal::uncertainty(&signal::ChainKnowledge {
        probe_db: cable.probe.uncertainty_db.unwrap_or(match cable.probe.kind {
            ProbeKind::Direct => 0.0,
            ProbeKind::Current | ProbeKind::Loop => known::PROBE_DB,
        }),
        receiver_db: instrument.uncertainty_db.unwrap_or(known::RECEIVER_DB),
        receiver_vswr: if attenuated { known::RECEIVER_VSWR.1 } else { known::RECEIVER_VSWR.0 },
        source_vswr: known::SOURCE_VSWR,
        repeatability_db: match cable.probe.kind {
            ProbeKind::Loop => known::LOOP_REPEATABILITY_DB,
            ProbeKind::Current | ProbeKind::Direct => known::REPEATABILITY_DB,
        },
    })
}

/// What of the site file bears on the levels of a cable, and on the blocks that references stand on.
fn bearing(site: &Site, cable: &Cable) -> Vec<String> {
    let mut lines = vec![
        format!("probe = {}", cable.probe.kind.label()),
        format!("factor = {}", table(&cable.probe.factor)),
        format!("path loss = {}", table(&cable.probe.path_loss)),
        format!("block = {}", site.drift.block),
    ];
    for band in &cable.bands {
        let exclude: Vec<String> = band.exclude.iter().map(|(from, to)| format!("{from}-{to}")).collect();
        let without = if exclude.is_empty() { String::new() } else { format!(" without {}", exclude.join(", ")) };
        lines.push(format!("band {} = {}-{} Hz{without}", band.name, band.from_hz, band.to_hz));
    }
    lines
}

/// A table as a word that is another one as soon as one of its numbers is (FNV-1a, 64 bits).
fn table(points: &[(f64, f64)]) -> String {
    let bytes = points.iter().flat_map(|(hz, db)| [hz.to_bits(), db.to_bits()]).flat_map(u64::to_le_bytes);
    let sum = bytes.fold(0xcbf2_9ce4_8422_2325_u64, |sum, byte| (sum ^ u64::from(byte)).wrapping_mul(0x100_0000_01b3));
    format!("a table of {} points, {sum:016x}", points.len())
}

fn chain(cable: &Cable) -> Result<signal::CorrectionChain, CurveError> {
    let curve = |points: &[(f64, f64)]| {
        if points.is_empty() { Ok(signal::Curve::flat(0.0)) } else { signal::Curve::new(points.to_vec()) }
    };
    Ok(signal::CorrectionChain {
        kind: match cable.probe.kind {
            ProbeKind::Current => signal::ProbeKind::Current,
            ProbeKind::Loop => signal::ProbeKind::Loop,
            ProbeKind::Direct => signal::ProbeKind::Direct,
        },
        factor: curve(&cable.probe.factor)?,
        path_loss: curve(&cable.probe.path_loss)?,
    })
}

fn receiver(instrument: &Instrument) -> signal::Receiver {
    signal::Receiver {
        floor: instrument.floor.map(|floor| match floor {
            Floor::NoiseFigureDb(db) => signal::Floor::NoiseFigureDb(db),
            Floor::DbmPerHz(dbm) => signal::Floor::DbmPerHz(dbm),
        }),
        overload_dbuv: instrument.overload_dbuv,
    }
}
