//! The command line: what may be asked, in which words.

mod quantities;

use std::path::PathBuf;

use clap::{Args, Parser, Subcommand, ValueEnum};

use crate::console::Format;

use quantities::{gigapascal, kelvin};

/// Environment variable that names the server.
pub const SERVER_VARIABLE: &str = "TAREHOUSE_SERVER";

/// What is at the end of every `--help`.
const EXIT_CODES: &str = "Exit codes: 0 accepted or done, 1 internal fault, 2 wrong usage or invalid package, \
    3 rejected, 4 held, 5 not found, 6 not allowed, 7 unavailable, 8 deadline, 9 conflict, 10 quota, 130 stopped by \
    Ctrl-C, 141 output closed. Of many, the worst: a verdict is better than none.";

/// Weighs force constants of molecular crystals before they enter a shared list.
#[derive(Debug, Parser)]
#[command(name = "tarehouse", version, after_help = EXIT_CODES, after_long_help = EXIT_CODES,
    subcommand_required = true, arg_required_else_help = true, max_term_width = 100)]
pub struct Arguments {
    /// What to do.
    #[command(subcommand)]
    pub command: Command,
}

/// What to do.
#[derive(Debug, Subcommand)]
pub enum Command {
    /// Examine a package here, without a server.
    #[command(
        after_help = "Examples:\n  tarehouse precheck form-ii\n  tarehouse precheck form-ii --format json\n  \
        tarehouse precheck form-ii --policy strict.toml"
    )]
    Precheck(PrecheckArgs),
    /// Send packages, wait for the verdicts, end with a summary.
    #[command(
        after_help = "A folder that is not a valid package is listed with everything that is wrong; nothing of it \
        is sent.\nRunning the same command again goes on where it stopped.\n\nExamples:\n  \
        tarehouse submit form-i form-ii --server http://tare.example:7417\n  \
        tarehouse submit landscape/* --local ./store\n  \
        tarehouse submit form-i --no-wait --format json"
    )]
    Submit(SubmitArgs),
    /// Wait for the verdict of a submission.
    #[command(
        after_help = "Examples:\n  tarehouse watch 3f2a… --server http://tare.example:7417\n  \
        tarehouse watch submissions/3f2a… --timeout 600"
    )]
    Watch(WatchArgs),
    /// Show the report of a submission or record: reasons, findings, soft modes, free energies.
    #[command(
        after_help = "Examples:\n  tarehouse report 3f2a…\n  tarehouse report records/3f2a… --all\n  \
        tarehouse report 3f2a… --format json > report.json"
    )]
    Report(ReportArgs),
    /// List records, submissions or compounds.
    #[command(
        after_help = "Examples:\n  tarehouse list\n  tarehouse list records --compound \"velnaric acid\"\n  \
        tarehouse list submissions --state held\n  tarehouse list compounds --format json"
    )]
    List(ListArgs),
    /// Fetch a file of a submission or record, as contributed or projected.
    #[command(
        after_help = "Examples:\n  tarehouse fetch records/3f2a… --out constants.npy\n  \
        tarehouse fetch records/3f2a… --projected --out projected.npy\n  \
        tarehouse fetch records/3f2a… --array package.toml --out package.toml"
    )]
    Fetch(FetchArgs),
    /// Take back a draft, or a submission that waits, was held, rejected or returned.
    #[command(
        after_help = "An accepted submission stays; a newer one with the same contributor_key takes its place.\n\n\
        Examples:\n  tarehouse withdraw 3f2a…\n  \
        tarehouse withdraw submissions/3f2a… --reason \"wrong unit, a corrected one follows\""
    )]
    Withdraw(WithdrawArgs),
    /// Rank the forms of a compound by free energy at chosen temperatures.
    #[command(after_help = "Examples:\n  tarehouse rank \"velnaric acid\"\n  \
        tarehouse rank \"velnaric acid\" --temperature 0,100,300,400\n  \
        tarehouse rank \"velnaric acid\" --temperature 0,300 --sort-at 300 --level pbe")]
    Rank(RankArgs),
    /// Follow one form along a setting: supercell, displacement, tolerance, sampling; says whether it still moves.
    #[command(after_help = "Examples:\n  tarehouse series 3f2a… 77c0… 91be…\n  \
        tarehouse series records/3f2a… records/77c0… records/91be… --format json")]
    Series(SeriesArgs),
    /// Free enthalpy, expansion and stiffness of one form from four volumes or more.
    #[command(
        after_help = "Examples:\n  tarehouse volume-series 3f2a… 77c0… 91be… a04d…\n  \
        tarehouse volume-series 3f2a… 77c0… 91be… a04d… --temperature 0,300 --pressure 0,0.5,1"
    )]
    VolumeSeries(VolumeSeriesArgs),
    /// See it work: examine the built-in packages in a fresh store and rank their forms.
    #[command(after_help = "Examples:\n  tarehouse demo\n  tarehouse demo --keep ./demo-store")]
    Demo(DemoArgs),
}

/// Which service to speak to.
#[derive(Debug, Clone, Default, Args)]
pub struct ConnectArgs {
    /// Address of the server, such as http://127.0.0.1:7417 [env: TAREHOUSE_SERVER]
    #[arg(long, value_name = "URL", conflicts_with = "local")]
    pub server: Option<String>,
    /// Open the store in this folder and run the service inside this process; no server needed
    #[arg(long, value_name = "DIR")]
    pub local: Option<PathBuf>,
}

/// How data is written.
#[derive(Debug, Clone, Copy, Default, Args)]
pub struct FormatArgs {
    /// auto: tables on a terminal, JSON elsewhere
    #[arg(long, value_enum, default_value_t, value_name = "FORMAT")]
    pub format: Format,
}

/// Arguments of `precheck`.
#[derive(Debug, Args)]
pub struct PrecheckArgs {
    /// Folder of the package
    pub package: PathBuf,
    /// Examine under this policy file instead of the built-in policy
    #[arg(long, value_name = "FILE", conflicts_with = "server")]
    pub policy: Option<PathBuf>,
    /// Examine under the policy of this server (the environment variable is not looked at)
    #[arg(long, value_name = "URL")]
    pub server: Option<String>,
    /// Show passes with their numbers, all clusters and all temperatures
    #[arg(long)]
    pub all: bool,
    /// How to write.
    #[command(flatten)]
    pub format: FormatArgs,
}

/// Arguments of `submit`.
#[derive(Debug, Args)]
pub struct SubmitArgs {
    /// Folders of the packages
    #[arg(required = true, value_name = "PACKAGE")]
    pub packages: Vec<PathBuf>,
    /// Do not wait for the verdicts; return the ids
    #[arg(long)]
    pub no_wait: bool,
    /// Stop waiting for a verdict after this many seconds
    #[arg(long, value_name = "SECONDS", conflicts_with = "no_wait")]
    pub timeout: Option<u64>,
    /// Where to.
    #[command(flatten)]
    pub connect: ConnectArgs,
    /// How to write.
    #[command(flatten)]
    pub format: FormatArgs,
}

/// Arguments of `watch`.
#[derive(Debug, Args)]
pub struct WatchArgs {
    /// The submission: its id, or submissions/ID
    pub id: String,
    /// Stop waiting after this many seconds
    #[arg(long, value_name = "SECONDS")]
    pub timeout: Option<u64>,
    /// Where to.
    #[command(flatten)]
    pub connect: ConnectArgs,
    /// How to write.
    #[command(flatten)]
    pub format: FormatArgs,
}

/// Arguments of `withdraw`.
#[derive(Debug, Args)]
pub struct WithdrawArgs {
    /// The submission: its id, or submissions/ID
    pub id: String,
    /// Why, for the service's log
    #[arg(
        long,
        value_name = "TEXT",
        default_value = "",
        hide_default_value = true
    )]
    pub reason: String,
    /// Where to.
    #[command(flatten)]
    pub connect: ConnectArgs,
    /// How to write.
    #[command(flatten)]
    pub format: FormatArgs,
}

/// Arguments of `report`.
#[derive(Debug, Args)]
pub struct ReportArgs {
    /// ID, submissions/ID or records/ID
    pub id: String,
    /// Show passes with their numbers, all clusters and all temperatures
    #[arg(long)]
    pub all: bool,
    /// Where to.
    #[command(flatten)]
    pub connect: ConnectArgs,
    /// How to write.
    #[command(flatten)]
    pub format: FormatArgs,
}

/// What `list` lists.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default, ValueEnum)]
pub enum Listed {
    /// Accepted crystals
    #[default]
    Records,
    /// Packages received, newest first
    Submissions,
    /// Compounds that have records
    Compounds,
}

/// A state to filter by.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum StateFilter {
    /// Arrays are being sent
    Draft,
    /// Waits for its examination
    Queued,
    /// In the catalogue
    Accepted,
    /// Waits for a curator
    Held,
    /// Turned down
    Rejected,
    /// Given back by a curator
    Returned,
    /// Was in the catalogue
    Retired,
    /// Taken back
    Withdrawn,
}

/// Arguments of `list`.
#[derive(Debug, Args)]
pub struct ListArgs {
    /// What to list
    #[arg(value_enum, default_value_t)]
    pub what: Listed,
    /// Only this compound
    #[arg(long, value_name = "NAME")]
    pub compound: Option<String>,
    /// Only this form (records)
    #[arg(long, value_name = "LABEL")]
    pub form: Option<String>,
    /// Only this state (submissions)
    #[arg(long, value_enum, value_name = "STATE")]
    pub state: Option<StateFilter>,
    /// Only this contributor's own id (submissions)
    #[arg(long, value_name = "KEY")]
    pub contributor_key: Option<String>,
    /// Retired records too
    #[arg(long)]
    pub retired: bool,
    /// At most this many entries
    #[arg(long, value_name = "COUNT")]
    pub limit: Option<usize>,
    /// Where to.
    #[command(flatten)]
    pub connect: ConnectArgs,
    /// How to write.
    #[command(flatten)]
    pub format: FormatArgs,
}

/// Arguments of `fetch`.
#[derive(Debug, Args)]
pub struct FetchArgs {
    /// ID, submissions/ID or records/ID
    pub id: String,
    /// File to fetch; package.toml fetches the manifest [default: the force constants]
    #[arg(long, value_name = "NAME")]
    pub array: Option<String>,
    /// The force constants projected onto sum rules and symmetry, eV/Å², displaced atom first
    #[arg(long, conflicts_with = "array")]
    pub projected: bool,
    /// File to write; it appears only when every byte has been verified
    #[arg(long, value_name = "FILE")]
    pub out: PathBuf,
    /// Overwrite the file
    #[arg(long)]
    pub force: bool,
    /// Where to.
    #[command(flatten)]
    pub connect: ConnectArgs,
    /// How to write.
    #[command(flatten)]
    pub format: FormatArgs,
}

/// Arguments of `rank`.
#[derive(Debug, Args)]
pub struct RankArgs {
    /// Compound, as in `tarehouse list compounds`
    pub compound: String,
    /// Temperatures, K, with commas between
    #[arg(long, value_name = "K,K,…", value_delimiter = ',', default_values_t = [0.0, 100.0, 300.0],
        value_parser = kelvin)]
    pub temperature: Vec<f64>,
    /// Order by the energy at this temperature instead of the first, K
    #[arg(long, value_name = "K", value_parser = kelvin)]
    pub sort_at: Option<f64>,
    /// Under this pressure, GPa: energies are G at each form's own cell
    #[arg(long, value_name = "GPA", value_parser = gigapascal)]
    pub pressure: Option<f64>,
    /// Only levels of theory that contain this text
    #[arg(long, value_name = "TEXT")]
    pub level: Option<String>,
    /// Where to.
    #[command(flatten)]
    pub connect: ConnectArgs,
    /// How to write.
    #[command(flatten)]
    pub format: FormatArgs,
}

/// Arguments of `series`.
#[derive(Debug, Args)]
pub struct SeriesArgs {
    /// Members: ID, submissions/ID or records/ID, in any order
    #[arg(required = true, num_args = 2.., value_name = "MEMBER")]
    pub members: Vec<String>,
    /// Where to.
    #[command(flatten)]
    pub connect: ConnectArgs,
    /// How to write.
    #[command(flatten)]
    pub format: FormatArgs,
}

/// Arguments of `volume-series`.
#[derive(Debug, Args)]
pub struct VolumeSeriesArgs {
    /// Members: ID, submissions/ID or records/ID, in any order
    #[arg(required = true, num_args = 4.., value_name = "MEMBER")]
    pub members: Vec<String>,
    /// Temperatures, K, with commas between
    #[arg(long, value_name = "K,K,…", value_delimiter = ',', default_values_t = [0.0, 300.0],
        value_parser = kelvin)]
    pub temperature: Vec<f64>,
    /// Pressures, GPa, with commas between
    #[arg(long, value_name = "GPA,GPA,…", value_delimiter = ',', default_values_t = [0.0],
        value_parser = gigapascal)]
    pub pressure: Vec<f64>,
    /// Where to.
    #[command(flatten)]
    pub connect: ConnectArgs,
    /// How to write.
    #[command(flatten)]
    pub format: FormatArgs,
}

/// Arguments of `demo`.
#[derive(Debug, Args)]
pub struct DemoArgs {
    /// Keep the store in this folder, to look at it afterwards with --local
    #[arg(long, value_name = "DIR")]
    pub keep: Option<PathBuf>,
}

#[cfg(test)]
mod tests;
