//! `thalweg settle`: equilibrium geometry, vibrations and force constants at each level of a spec.

use super::args::{CommonArgs, SettleArgs};
use super::occupied::own_journal;
use super::{Failure, Status, Streams, load};
use crate::job::journal::{Journal, JournalError, Line};
use crate::job::settle::{self, SettledLevel};
use crate::minimise::MinimiseStop;
use crate::report::folder::RunFolder;
use crate::report::settled;
use crate::spec::Spec;
use std::path::PathBuf;
use std::sync::atomic::AtomicBool;

/// What a journal of settled molecules is marked with beside the spec's fingerprint.
const MARK: &str = "-settle";
const MARK_PUSH: &str = "-settle-push";

pub(super) fn run(
    args: &SettleArgs,
    stop: &AtomicBool,
    streams: &mut Streams<'_>,
) -> Result<Status, Failure> {
    let spec = load(&args.spec, streams)?;
    let place = args
        .common
        .out
        .clone()
        .unwrap_or_else(|| beside(&spec.output.folder));
    let folder = RunFolder::at(&place);
    let fingerprint = format!(
        "{}{}",
        spec.fingerprint(),
        if args.push { MARK_PUSH } else { MARK }
    );
    let done = existing(&folder, &fingerprint, args.fresh, streams)?;
    let settled = if done.len() == spec.levels.len() {
        done
    } else {
        work(&spec, &folder, &fingerprint, args, done, stop, streams)?
    };
    finish(&spec, &settled, &folder, &args.common, streams)
}

/// A scan of the same spec has the folder itself.
fn beside(folder: &std::path::Path) -> PathBuf {
    let mut name = folder.file_name().unwrap_or_default().to_os_string();
    name.push("-settled");
    folder.with_file_name(name)
}

/// Reports a folder of settled molecules again; `None` if the journal is another kind's.
pub(super) fn report(
    spec: &Spec,
    fingerprint: &str,
    lines: &[Line],
    folder: &RunFolder,
    common: &CommonArgs,
    streams: &mut Streams<'_>,
) -> Option<Result<Status, Failure>> {
    let own = spec.fingerprint();
    if fingerprint != format!("{own}{MARK}") && fingerprint != format!("{own}{MARK_PUSH}") {
        return None;
    }
    let settled = settled_of(lines);
    let mut write = || {
        folder.create()?;
        finish(spec, &settled, folder, common, streams)
    };
    Some(write())
}

fn settled_of(lines: &[Line]) -> Vec<SettledLevel> {
    let mut settled: Vec<SettledLevel> = lines
        .iter()
        .filter_map(|line| match line {
            Line::Settled(settled) => Some((**settled).clone()),
            _ => None,
        })
        .collect();
    settled.sort_by_key(|s| s.level);
    settled
}

/// Levels that the folder already holds.
fn existing(
    folder: &RunFolder,
    fingerprint: &str,
    fresh: bool,
    streams: &mut Streams<'_>,
) -> Result<Vec<SettledLevel>, Failure> {
    let found = own_journal(folder, fingerprint, fresh, streams)?;
    Ok(found
        .filter(|(header, _)| header.is_of_this_version())
        .map_or_else(Vec::new, |(_, lines)| settled_of(&lines)))
}

fn work(
    spec: &Spec,
    folder: &RunFolder,
    fingerprint: &str,
    args: &SettleArgs,
    done: Vec<SettledLevel>,
    stop: &AtomicBool,
    streams: &mut Streams<'_>,
) -> Result<Vec<SettledLevel>, Failure> {
    folder.create()?;
    folder.write("spec.toml", spec.text.as_bytes())?;
    let mut journal = Journal::create(&folder.journal(), fingerprint)?;
    for level in &done {
        journal.append(&Line::Settled(Box::new(level.clone())))?;
    }
    let pool = rayon::ThreadPoolBuilder::new()
        .num_threads(args.common.threads.map_or(0, usize::from))
        .build()
        .map_err(Failure::system)?;
    let mut lost_journal: Option<JournalError> = None;
    let quiet = args.common.quiet;
    let result = settle::run(spec, args.push, done, &pool, stop, &mut |level| {
        if let Err(error) = journal.append(&Line::Settled(Box::new(level.clone()))) {
            lost_journal.get_or_insert(error);
        }
        if !quiet {
            let name = spec.levels.get(level.level).map_or("", |l| &l.name);
            // Progress is a courtesy: a closed stderr must not end the run.
            let _ = writeln!(
                streams.err,
                "{name}: settled after {} gradient calls, {:.1} s",
                level.gradient_calls, level.wall_seconds
            );
        }
    });
    match lost_journal {
        Some(error) => Err(error.into()),
        None => Ok(result?),
    }
}

fn finish(
    spec: &Spec,
    settled: &[SettledLevel],
    folder: &RunFolder,
    common: &CommonArgs,
    streams: &mut Streams<'_>,
) -> Result<Status, Failure> {
    settled::write_all(folder, spec, settled)?;
    let text = if common.json {
        settled::summary(spec, settled)
    } else {
        settled::text(spec, settled)
    };
    streams.out.write_all(text.as_bytes())?;
    streams.out.flush()?;
    if !common.quiet {
        writeln!(streams.err, "results in {}", folder.path().display())?;
    }
    let converged = settled.iter().all(|s| s.stop == MinimiseStop::Converged);
    Ok(if converged {
        Status::Done
    } else {
        Status::Unconverged
    })
}
