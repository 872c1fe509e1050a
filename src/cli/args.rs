//! The command line: one definition from which parsing, help, completions and the man page
//! all come.

use clap::{Args, Parser, Subcommand};

use super::commands;

/// Gives every detection of a crowded, moving star field to the right star, and says how sure
/// it is of each link.
#[derive(Debug, Parser)]
#[command(
    name = "asterskein",
    version,
    max_term_width = 100,
    after_help = "Start with `asterskein check field.toml`, then `asterskein link field.toml --out run1`.\n\
                  Exit codes: 0 done, 1 the data or the run failed, 2 wrong usage."
)]
pub struct Cli {
    #[command(flatten)]
    pub global: Global,
    #[command(subcommand)]
    pub command: Command,
}

/// Options of every command.
#[derive(Clone, Debug, Args)]
#[command(next_help_heading = "Everywhere")]
pub struct Global {
    /// Worker threads; 0 = one per processor. Does not change the result.
    #[arg(long, global = true, value_name = "N", default_value_t = 0)]
    pub threads: usize,
    /// Say nothing but errors (and --json output).
    #[arg(long, short, global = true, conflicts_with = "verbose")]
    pub quiet: bool,
    /// Say more.
    #[arg(long, short, global = true)]
    pub verbose: bool,
    /// Print the summary as JSON on standard output.
    #[arg(long, global = true)]
    pub json: bool,
}

#[derive(Debug, Subcommand)]
pub enum Command {
    /// Look at the lists of a campaign and name what is odd; writes nothing.
    Check(commands::check::Args),
    /// Link the detections of a campaign into tracks (the main job).
    Link(commands::link::Args),
    /// Draw a result again, or a part of it.
    Report(commands::report::Args),
    /// Weigh claimed objects against everything else that could have made their positions.
    Audit(commands::audit::Args),
    /// Put made-up stars into the lists of a result, link again, and count what is found.
    Recover(commands::recover::Args),
    /// Write observations, start orbits and conventions of chosen tracks for an orbit fitter.
    Handoff(commands::handoff::Args),
    /// Print a table of a result, or some rows and columns of it.
    List(commands::list::Args),
    /// Say why a track or a detection came out as it did, and how to rule otherwise.
    Explain(commands::explain::Args),
    /// Make a campaign with known truth.
    Mock(commands::mock::Args),
    /// Judge a result by the truth of its made-up campaign.
    Score(commands::score::Args),
    /// Print completions for a shell.
    #[command(hide = true)]
    Completions(commands::shell::Args),
    /// Print the man page.
    #[command(hide = true)]
    Man,
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn the_definition_is_sound() {
        use clap::CommandFactory;
        Cli::command().debug_assert();
    }
}
