//! Raw command line: what the user typed, before it meets the survey file.

use std::path::PathBuf;

use clap::{Args, Parser, Subcommand, ValueEnum};

/// Caution shown by `--help` and repeated in every summary.
pub const CAUTION: &str = isopsi::report::CAUTION;

/// From measured planar velocity vectors to a stream function, stagnation points, streamlines and cells.
#[derive(Debug, Parser)]
#[command(name = "isopsi", version, after_help = CAUTION, propagate_version = true, max_term_width = 110)]
pub struct Cli {
    /// What to do.
    #[command(subcommand)]
    pub command: Command,
}

/// The commands.
#[derive(Debug, Subcommand)]
pub enum Command {
    /// The whole job: check, stream function, points, lines, cells, figure, all files
    #[command(after_help = CAUTION)]
    Run {
        #[command(flatten)]
        common: Common,
        /// Folder for the results
        #[arg(long, value_name = "DIR")]
        out: PathBuf,
        /// Replace results of other settings in that folder
        #[arg(long)]
        overwrite: bool,
    },
    /// What was read (grid, spacing, units, frames, gaps, ranges) and what looks doubtful
    #[command(after_help = CAUTION)]
    Inspect {
        #[command(flatten)]
        common: Common,
        /// Write a commented survey file holding what was found
        #[arg(long, value_name = "FILE.toml")]
        write: Option<PathBuf>,
    },
    /// The incompressibility check and its verdict
    #[command(after_help = CAUTION)]
    Divergence {
        #[command(flatten)]
        common: Common,
        /// Exit with 3 unless the verdict is this one
        #[arg(long, value_name = "VERDICT")]
        require: Option<Required>,
    },
    /// The screened and filled field, flags beside it
    #[command(after_help = CAUTION)]
    Clean {
        #[command(flatten)]
        common: Common,
        /// File to write: .csv .npz .npy .h5
        #[arg(long, value_name = "FILE")]
        out: PathBuf,
    },
    /// The stream-function file
    #[command(after_help = CAUTION)]
    Psi {
        #[command(flatten)]
        common: Common,
        /// File to write: .h5 .npz .csv
        #[arg(long, value_name = "FILE")]
        out: PathBuf,
    },
    /// The table of stagnation points
    #[command(after_help = CAUTION)]
    Stagnation {
        #[command(flatten)]
        common: Common,
        /// Table to write; standard output when absent
        #[arg(long, value_name = "FILE.csv")]
        out: Option<PathBuf>,
    },
    /// The streamlines, one row a vertex
    #[command(after_help = CAUTION)]
    Streamlines {
        #[command(flatten)]
        common: Common,
        /// Table to write; standard output when absent
        #[arg(long, value_name = "FILE.csv")]
        out: Option<PathBuf>,
    },
    /// Volume flux between two points, from psi and along the straight line
    #[command(after_help = CAUTION)]
    Flux {
        #[command(flatten)]
        common: Common,
        /// First point
        #[arg(long, value_name = "X,Y", allow_hyphen_values = true)]
        from: String,
        /// Second point
        #[arg(long, value_name = "X,Y", allow_hyphen_values = true)]
        to: String,
    },
    /// One publication figure
    #[command(after_help = CAUTION)]
    Figure {
        #[command(flatten)]
        common: Common,
        /// File to write: .svg .pdf .png
        #[arg(long, value_name = "FILE")]
        out: PathBuf,
    },
}

impl Command {
    /// The options all commands share.
    pub fn common(&self) -> &Common {
        match self {
            Command::Run { common, .. }
            | Command::Inspect { common, .. }
            | Command::Divergence { common, .. }
            | Command::Clean { common, .. }
            | Command::Psi { common, .. }
            | Command::Stagnation { common, .. }
            | Command::Streamlines { common, .. }
            | Command::Flux { common, .. }
            | Command::Figure { common, .. } => common,
        }
    }
}

/// Verdicts that `--require` knows.
#[derive(Debug, Clone, Copy, PartialEq, Eq, ValueEnum)]
pub enum Required {
    /// Nothing speaks against plane incompressible flow
    Consistent,
    /// The vectors cannot be plane incompressible flow plus the declared noise
    Inconsistent,
    /// It cannot be told
    Undecided,
}

/// Options of every command; each is also a key of the survey file, and the flag wins.
#[derive(Debug, Args, Default)]
pub struct Common {
    /// Files, a folder, a quoted glob, or a survey file (.toml)
    #[arg(required = true, value_name = "INPUT")]
    pub inputs: Vec<PathBuf>,

    /// Print nothing but results and errors
    #[arg(long, short)]
    pub quiet: bool,
    /// Results as JSON on standard output
    #[arg(long)]
    pub json: bool,
    /// Number of threads (results do not depend on it)
    #[arg(long, value_name = "N")]
    pub threads: Option<usize>,
    /// Seed of the noise ensemble
    #[arg(long, value_name = "N")]
    pub seed: Option<u64>,

    /// Where an array is: ROLE=PATH, for example u=/run3/vx (repeatable)
    #[arg(long, value_name = "ROLE=PATH", help_heading = "Data")]
    pub array: Vec<String>,
    /// Columns of a text table in order or by name: x,y,u,v
    #[arg(long, value_name = "LIST", help_heading = "Data")]
    pub columns: Option<String>,
    /// Order of the dimensions: y,x or x,y or t,y,x ...
    #[arg(long, value_name = "DIMS", help_heading = "Data")]
    pub order: Option<String>,
    /// Frames to take: 7, 10..200 or 10..200:5, counted from 0
    #[arg(long, value_name = "RANGE", help_heading = "Data")]
    pub frames: Option<String>,
    /// What a vector of exactly (0, 0) means
    #[arg(long, value_name = "value|gap", help_heading = "Data")]
    pub zero: Option<String>,

    /// Node spacing, one number or DX,DY
    #[arg(long, value_name = "DX[,DY]", help_heading = "Geometry")]
    pub spacing: Option<String>,
    /// Position of the first node
    #[arg(long, value_name = "X,Y", allow_hyphen_values = true, help_heading = "Geometry")]
    pub origin: Option<String>,
    /// Direction in which y and v count: down as in images
    #[arg(long, value_name = "up|down", help_heading = "Geometry")]
    pub y: Option<String>,
    /// Length of a pixel, for example "0.052 mm"
    #[arg(long, value_name = "LENGTH", help_heading = "Geometry")]
    pub scale: Option<String>,
    /// Time between the two exposures, for example "2 ms"
    #[arg(long, value_name = "TIME", help_heading = "Geometry")]
    pub interval: Option<String>,
    /// A body: "circle X,Y,R", "polygon X,Y X,Y X,Y ..." or "mask FILE", then slip, no-slip or free (repeatable)
    #[arg(long, value_name = "SHAPE", help_heading = "Geometry")]
    pub solid: Vec<String>,
    /// An impermeable side: SIDE=slip or SIDE=no-slip, with " at POSITION" when it is off the outermost nodes (repeatable)
    #[arg(long, value_name = "SIDE=SURFACE", help_heading = "Geometry")]
    pub wall: Vec<String>,
    /// Thickness of the layer: uniform, radius (axisymmetric about y = 0) or a depth map file
    #[arg(long, value_name = "KIND", help_heading = "Geometry")]
    pub thickness: Option<String>,

    /// Unit of the coordinates in the data
    #[arg(long, value_name = "UNIT", help_heading = "Units")]
    pub length_unit: Option<String>,
    /// Unit of the velocities in the data
    #[arg(long, value_name = "UNIT", help_heading = "Units")]
    pub velocity_unit: Option<String>,
    /// Units of the results: length,time
    #[arg(long, value_name = "L,T", help_heading = "Units")]
    pub units: Option<String>,

    /// Standard uncertainty (k = 1) of u and v: "0.4 mm/s", "0.1 px", auto or file
    #[arg(long, value_name = "SIGMA", help_heading = "Noise")]
    pub sigma: Option<String>,
    /// Share by which neighboring windows overlap, 0 to 1, or auto
    #[arg(long, value_name = "SHARE", help_heading = "Noise")]
    pub overlap: Option<String>,
    /// Members of the noise ensemble
    #[arg(long, value_name = "N", help_heading = "Noise")]
    pub members: Option<usize>,

    /// Limit of the normalized median test
    #[arg(long, value_name = "RATIO", help_heading = "Screening")]
    pub screen_limit: Option<f64>,
    /// Noise level of the median test in units of sigma
    #[arg(long, value_name = "FACTOR", help_heading = "Screening")]
    pub screen_epsilon: Option<f64>,
    /// Passes of the screening
    #[arg(long, value_name = "N", help_heading = "Screening")]
    pub screen_passes: Option<usize>,
    /// Take every vector as it is
    #[arg(long, help_heading = "Screening")]
    pub no_screen: bool,

    /// Smoothing of the feature field: auto, none or a number
    #[arg(long, value_name = "S", help_heading = "Fit")]
    pub smoothing: Option<String>,
    /// Where psi is 0: mean, a wall (bottom ...), "body N" or X,Y
    #[arg(long, value_name = "PLACE", allow_hyphen_values = true, help_heading = "Fit")]
    pub psi_zero: Option<String>,
    /// Sign of the reported psi: + (u = dpsi/dy) or - (u = -dpsi/dy)
    #[arg(long, value_name = "+|-", allow_hyphen_values = true, help_heading = "Fit")]
    pub psi_sign: Option<String>,

    /// Levels of psi to draw
    #[arg(long, value_name = "LIST", allow_hyphen_values = true, help_heading = "Streamlines")]
    pub levels: Option<String>,
    /// About how many levels, at round values
    #[arg(long, value_name = "N", help_heading = "Streamlines")]
    pub count: Option<usize>,
    /// Flux between neighboring streamlines
    #[arg(long, value_name = "DPSI", help_heading = "Streamlines")]
    pub step: Option<f64>,
    /// Largest distance of a chord from its streamline, in node spacings
    #[arg(long, value_name = "H", help_heading = "Streamlines")]
    pub tolerance: Option<f64>,

    /// Figure width: single, wide, double, or millimeters
    #[arg(long, value_name = "WIDTH", help_heading = "Figure")]
    pub width: Option<String>,
    /// Background: none, speed, vorticity, divergence, divergence_z, psi, residual
    #[arg(long, value_name = "FIELD", help_heading = "Figure")]
    pub background: Option<String>,
    /// Leave the levels without labels
    #[arg(long, help_heading = "Figure")]
    pub no_labels: bool,
    /// Figure files that `run` writes: svg,pdf,png
    #[arg(long, value_name = "LIST", help_heading = "Figure")]
    pub formats: Option<String>,
    /// Color map of the background
    #[arg(long, value_name = "NAME", help_heading = "Figure")]
    pub color_map: Option<String>,
    /// Font size in points
    #[arg(long, value_name = "PT", help_heading = "Figure")]
    pub font_size: Option<f64>,
}
