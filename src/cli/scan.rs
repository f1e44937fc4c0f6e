//! `thalweg scan` and `thalweg report`: from a spec, or from a journal, to files and a table.

use super::args::{CommonArgs, ReportArgs, ScanArgs};
use super::occupied::own_journal;
use super::progress::Progress;
use super::{Failure, Status, Streams, load, told};
use crate::job::journal::{self, Journal, JournalError, LevelEntry, Line};
use crate::job::{self, JobError, JobEvent, JobRecord, JobResult};
use crate::plot::PlotError;
use crate::report::folder::RunFolder;
use crate::report::{self, figures};
use crate::scan::Event;
use crate::spec::{Spec, load_reporting};
use std::sync::atomic::AtomicBool;

impl From<PlotError> for Failure {
    fn from(error: PlotError) -> Self {
        Self::system(error)
    }
}

impl From<JobError> for Failure {
    fn from(error: JobError) -> Self {
        match error {
            error if error.is_interruption() => Self {
                message: error.to_string(),
                status: Status::Interrupted,
            },
            JobError::Level { .. } | JobError::Geometry { .. } => Self::usage(error),
            JobError::Scan { .. } | JobError::Settle { .. } => Self::system(error),
        }
    }
}

pub(super) fn run(
    args: &ScanArgs,
    stop: &AtomicBool,
    streams: &mut Streams<'_>,
) -> Result<Status, Failure> {
    let spec = load(&args.spec, streams)?;
    let folder = RunFolder::at(args.common.out.as_deref().unwrap_or(&spec.output.folder));
    let known = existing(&folder, &spec, args.fresh, streams)?;
    let record = if known.ends.len() == spec.levels.len() {
        known
    } else {
        walk(&spec, known, &folder, &args.common, stop, streams)?
    };
    finish(&spec, &record, &folder, &args.common, streams)
}

pub(super) fn report(args: &ReportArgs, streams: &mut Streams<'_>) -> Result<Status, Failure> {
    let source = RunFolder::at(&args.run);
    let mut spec = load(&source.path().join("spec.toml"), streams)?;
    let (header, lines) = journal::read(&source.journal())?;
    let folder = RunFolder::at(args.common.out.as_deref().unwrap_or(source.path()));
    let settled = super::settle::report(
        &spec,
        &header.fingerprint,
        &lines,
        &folder,
        &args.common,
        streams,
    );
    if let Some(status) = settled {
        return status;
    }
    if header.fingerprint != spec.fingerprint() {
        return Err(Failure::usage(format!(
            "{}: the journal belongs to another spec than the spec.toml beside it",
            source.path().display()
        )));
    }
    if let Some(path) = &args.spec {
        let other = told(load_reporting(path, &spec.text), streams)?;
        if other.fingerprint() != spec.fingerprint() {
            writeln!(
                streams.err,
                "{}: describes another calculation than the run; only title, [[fit]], [vibration] and [output] are taken from it",
                path.display()
            )?;
        }
        spec.take_reporting_from(other);
    }
    let record = record_of(lines);
    if record.ends.len() < spec.levels.len() {
        return Err(Failure::usage(format!(
            "{}: the run is not complete ({} of {} levels); run `thalweg scan` on its spec first",
            source.path().display(),
            record.ends.len(),
            spec.levels.len()
        )));
    }
    folder.create()?;
    finish(&spec, &record, &folder, &args.common, streams)
}

/// The complete levels that the folder already holds of this very run.
fn existing(
    folder: &RunFolder,
    spec: &Spec,
    fresh: bool,
    streams: &mut Streams<'_>,
) -> Result<JobRecord, Failure> {
    let Some((header, lines)) = own_journal(folder, spec.fingerprint(), fresh, streams)? else {
        return Ok(JobRecord::default());
    };
    let mut record = if header.is_of_this_version() {
        record_of(lines)
    } else {
        JobRecord::default()
    };
    record.keep_complete_levels();
    let (complete, all) = (record.ends.len(), spec.levels.len());
    if complete < all {
        writeln!(
            streams.err,
            "{}: {complete} of {all} levels are complete and taken over; the others start from their first point",
            folder.path().display()
        )?;
    }
    Ok(record)
}

fn record_of(lines: Vec<Line>) -> JobRecord {
    let mut record = JobRecord::default();
    for line in lines {
        match line {
            Line::Header(_) | Line::Settled(_) => {}
            Line::Point(entry) => record.entries.push(entry),
            Line::Limit(limit) => record.limits.push(limit),
            Line::Onset(onset) => record.onsets.push(onset),
            Line::Stationary(found) => record.stationary.push(found),
            Line::Complete(end) => record.ends.push(end),
        }
    }
    record.entries.sort_by_key(|e| (e.level, e.entry.order));
    record
}

/// The lines of a record, as they stand in its journal.
fn lines_of(record: &JobRecord) -> impl Iterator<Item = Line> {
    let entries = record.entries.iter().cloned().map(Line::Point);
    let limits = record.limits.iter().cloned().map(Line::Limit);
    let onsets = record.onsets.iter().cloned().map(Line::Onset);
    let stationary = record.stationary.iter().cloned().map(Line::Stationary);
    let ends = record.ends.iter().cloned().map(Line::Complete);
    entries
        .chain(limits)
        .chain(onsets)
        .chain(stationary)
        .chain(ends)
}

/// Runs what is left of the spec, keeping the journal as it goes.
fn walk(
    spec: &Spec,
    known: JobRecord,
    folder: &RunFolder,
    common: &CommonArgs,
    stop: &AtomicBool,
    streams: &mut Streams<'_>,
) -> Result<JobRecord, Failure> {
    folder.create()?;
    folder.write("spec.toml", spec.text.as_bytes())?;
    let mut journal = Journal::create(&folder.journal(), spec.fingerprint())?;
    for line in lines_of(&known) {
        journal.append(&line)?;
    }
    let pool = rayon::ThreadPoolBuilder::new()
        .num_threads(common.threads.map_or(0, usize::from))
        .build()
        .map_err(Failure::system)?;
    let mut progress = Progress::new(streams, common.quiet);
    let mut lost_journal: Option<JournalError> = None;
    let result = job::run_rest(spec, known, &pool, stop, &mut |event| {
        let line = match event {
            JobEvent::Walk {
                level,
                event: Event::Evaluated(entry),
                ..
            } => Some(Line::Point(LevelEntry {
                level: *level,
                entry: (**entry).clone(),
            })),
            JobEvent::Limit(limit) => Some(Line::Limit((*limit).clone())),
            JobEvent::Onset(onset) => Some(Line::Onset((*onset).clone())),
            JobEvent::Stationary(found) => Some(Line::Stationary((*found).clone())),
            JobEvent::LevelDone(end) => Some(Line::Complete((*end).clone())),
            JobEvent::Walk { .. } => None,
        };
        if let Some(Err(error)) = line.map(|l| journal.append(&l)) {
            lost_journal.get_or_insert(error);
        }
        progress.on(event);
    });
    progress.end();
    match lost_journal {
        Some(error) => Err(error.into()),
        None => Ok(result?),
    }
}

/// Writes the files and the table.
fn finish(
    spec: &Spec,
    record: &JobRecord,
    folder: &RunFolder,
    common: &CommonArgs,
    streams: &mut Streams<'_>,
) -> Result<Status, Failure> {
    let result = job::assemble(spec, record)?;
    report::write_all(folder, spec, &result)?;
    for (name, bytes) in figures::render(spec, &result)? {
        folder.write(&name, &bytes)?;
    }
    if common.json {
        streams
            .out
            .write_all(report::summary::render(&result).as_bytes())?;
    } else {
        streams
            .out
            .write_all(report::text::render(&result, spec.output.energy).as_bytes())?;
    }
    streams.out.flush()?;
    if !common.quiet {
        writeln!(streams.err, "results in {}", folder.path().display())?;
    }
    Ok(if all_converged(&result) {
        Status::Done
    } else {
        Status::Unconverged
    })
}

fn all_converged(result: &JobResult) -> bool {
    result
        .levels
        .iter()
        .all(|l| l.points.iter().all(|p| p.record.energy.is_some()))
}
