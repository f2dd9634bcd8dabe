//! A Python of our own, with pinned libraries, under the target folder; made once, shared by all tests.

use sha2::{Digest, Sha256};
use std::fs::{self, File};
use std::path::{Path, PathBuf};
use std::process::{Command, Output};
use std::sync::OnceLock;

/// Oldest Python the pinned libraries install on.
const OLDEST: (u32, u32) = (3, 11);

/// The folder of scripts and of the pinned requirements.
pub fn scripts() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/python")
}

/// The environment's Python, or one sentence on why there is none. Made by the first test that asks.
pub fn python() -> Result<&'static Path, &'static str> {
    static MADE: OnceLock<Result<PathBuf, String>> = OnceLock::new();
    MADE.get_or_init(make).as_deref().map_err(String::as_str)
}

fn make() -> Result<PathBuf, String> {
    let requirements = scripts().join("requirements.txt");
    let text = fs::read(&requirements).map_err(|e| format!("{}: {e}", requirements.display()))?;
    let (system, version) = find_system_python()?;

    let mut hash = Sha256::new();
    hash.update(&text);
    hash.update(version.as_bytes());
    let key: String = hash.finalize().iter().take(8).map(|byte| format!("{byte:02x}")).collect();
    let target = Path::new(env!("CARGO_TARGET_TMPDIR")).parent().unwrap_or(Path::new("target"));
    let home = target.join("python-references");
    let environment = home.join(&key);
    let python = environment.join(if cfg!(windows) { "Scripts/python.exe" } else { "bin/python" });
    // written last: an environment without it is half built and is made again
    let marker = environment.join("complete");

    let io = |what: &Path, e: std::io::Error| format!("{}: {e}", what.display());
    fs::create_dir_all(&home).map_err(|e| io(&home, e))?;
    let lock_path = home.join("lock");
    let lock = File::create(&lock_path).map_err(|e| io(&lock_path, e))?;
    // two `cargo test` at once must not build it twice; the lock goes with the file handle
    lock.lock().map_err(|e| io(&lock_path, e))?;
    if marker.exists() && python.exists() {
        return Ok(python);
    }
    if environment.exists() {
        fs::remove_dir_all(&environment).map_err(|e| io(&environment, e))?;
    }
    run(
        clean(&system).args(["-m", "venv"]).arg(&environment),
        "making a virtual environment failed (on Debian and Ubuntu: apt install python3-venv)",
    )?;
    run(
        clean(&python)
            .args(["-m", "pip", "install", "--quiet", "--disable-pip-version-check", "--only-binary", ":all:"])
            .args(["--retries", "2", "--timeout", "60", "--requirement"])
            .arg(&requirements),
        "pip could not install tests/python/requirements.txt (is there a network?)",
    )?;
    fs::write(&marker, &key).map_err(|e| io(&marker, e))?;
    Ok(python)
}

/// The first Python on the path that is new enough, and its version.
fn find_system_python() -> Result<(PathBuf, String), String> {
    let mut seen = Vec::new();
    for name in ["python3", "python3.14", "python3.13", "python3.12", "python3.11", "python"] {
        let script = "import sys; print('%d.%d.%d' % sys.version_info[:3])";
        let Ok(output) = clean(Path::new(name)).args(["-c", script]).output() else { continue };
        let version = String::from_utf8_lossy(&output.stdout).trim().to_owned();
        let mut parts = version.split('.').map(|part| part.parse::<u32>().unwrap_or(0));
        let found = (parts.next().unwrap_or(0), parts.next().unwrap_or(0));
        if output.status.success() && found >= OLDEST {
            return Ok((PathBuf::from(name), version));
        }
        seen.push(format!("{name} {version}"));
    }
    let (major, minor) = OLDEST;
    let seen = if seen.is_empty() { "none".to_owned() } else { seen.join(", ") };
    Err(format!("no Python {major}.{minor} or newer on the path (found: {seen})"))
}

/// A command that sees nothing of the user's own Python settings.
pub fn clean(program: &Path) -> Command {
    let mut command = Command::new(program);
    command.env_remove("PYTHONPATH").env_remove("PYTHONHOME").env_remove("VIRTUAL_ENV");
    command.env("PYTHONDONTWRITEBYTECODE", "1").env("PYTHONNOUSERSITE", "1");
    command
}

fn run(command: &mut Command, failure: &str) -> Result<Output, String> {
    let output = command.output().map_err(|e| format!("{failure}: {e}"))?;
    if output.status.success() {
        return Ok(output);
    }
    let error = String::from_utf8_lossy(&output.stderr);
    let said = error.lines().rev().find(|line| !line.trim().is_empty()).unwrap_or("no message");
    Err(format!("{failure}: {said}"))
}
