//! `bitassay demo`
//!
//! The scenario is made up: a lantern on a breakwater sends faint pulses in one of four polarisations, 45° apart, to a receiver ashore,
//! which analyses each at 0° or 45°. The figures are invented and illustrate nothing but the program.

use std::{io::Write, net::Ipv4Addr, path::PathBuf, process::ExitCode, sync::Arc};

use anyhow::{Context, bail, ensure};
use bitassay::{
    certify::certify,
    clock::SystemClock,
    http::{limits::Limits, server},
    ledger::Ledger,
    service::{Service, Solvers},
};
use clap::Args;
use rand::{SeedableRng, rngs::StdRng};
use rand_distr::{Binomial, Distribution};
use serde_json::{Value, json};
use tokio::{net::TcpListener, sync::oneshot};

const RIG: &str = "breakwater-lantern";
const ROUNDS_PER_SETTING: u64 = 1_000_000;
const DECLARED_LEAKAGE: f64 = 1e-4;

/// A day at the rig: what really happens there.
struct Day {
    name: &'static str,
    story: &'static str,
    /// Contrast of the polarisation optics.
    visibility: f64,
    /// Weight outside the two-dimensional carrier that the source really has, put to use as well as it can be.
    leakage: f64,
}

const DAYS: [Day; 4] = [
    Day { name: "clear", story: "optics clean, source as declared", visibility: 0.998, leakage: 0.0 },
    Day { name: "salt-spray", story: "salt on the window: less contrast", visibility: 0.985, leakage: 0.0 },
    Day { name: "bright-pulses", story: "attenuator slipped: the source leaks more than declared", visibility: 1.0, leakage: 0.02 },
    Day { name: "fog", story: "mostly background light", visibility: 0.70, leakage: 0.0 },
];

/// Drive a real server as a rig would and show what was certified, what was refused, and why
///
/// Starts the service on a free loopback port with a database file, declares a simulated rig, posts four batches of counts over HTTP (a
/// good day, a noisier one, a source that leaks more than declared, a bound at zero) and a fifth one under a commitment made before it, with no
/// assumption that rounds are independent; then reads back the history and the yield. The rig and its figures are invented.
#[derive(Args)]
pub struct Demo {
    /// The database; must not exist yet. By default a new file in the directory for temporary files
    #[arg(long, value_name = "FILE")]
    database: Option<PathBuf>,

    /// Leave the server running afterwards, until it is interrupted
    #[arg(long)]
    stay: bool,
}

impl Demo {
    pub fn run(self) -> anyhow::Result<ExitCode> {
        let database =
            self.database.clone().unwrap_or_else(|| std::env::temp_dir().join(format!("bitassay-demo-{}.sqlite", std::process::id())));
        if database.exists() {
            bail!("{} exists; the demo starts from an empty database", database.display());
        }
        let runtime = tokio::runtime::Builder::new_multi_thread().enable_all().build().context("no threads to run on")?;
        runtime.block_on(async {
            let ledger = Ledger::open(&database).await?;
            let solvers = Solvers::start(2, 16, Arc::new(certify)).context("no threads to solve on")?;
            let service = Service::new(ledger, solvers, Arc::new(SystemClock));
            let listener = TcpListener::bind((Ipv4Addr::LOCALHOST, 0)).await.context("cannot listen on loopback")?;
            let base = format!("http://{}", listener.local_addr()?);
            let (stop, stopped) = oneshot::channel::<()>();
            let server = tokio::spawn(server::run(listener, service, Limits::default(), async { drop(stopped.await) }));
            writeln!(std::io::stdout(), "server    {base}\ndatabase  {}\n", database.display())?;
            let told = base.clone();
            let visit = tokio::task::spawn_blocking(move || Visit { base: told, agent: agent() }.all()).await?;
            if visit.is_ok() && self.stay {
                writeln!(
                    std::io::stdout(),
                    "\nThe server stays at {base}; try  curl {base}/v1/certifications  and interrupt it when done."
                )?;
                tokio::signal::ctrl_c().await.context("no interrupts on this system")?;
            }
            // The server may have ended on its own; its result is asked for next.
            let _ = stop.send(());
            server.await??;
            visit
        })?;
        Ok(ExitCode::SUCCESS)
    }
}

fn agent() -> ureq::Agent {
    ureq::Agent::config_builder().http_status_as_error(false).build().into()
}

/// One client at the service.
struct Visit {
    base: String,
    agent: ureq::Agent,
}

impl Visit {
    fn all(&self) -> anyhow::Result<()> {
        self.declare()?;
        writeln!(
            std::io::stdout(),
            "{:<14} {:>6} {:>10} {:>12} {:>10}   what happened, and why",
            "day",
            "status",
            "verdict",
            "bits",
            "per round"
        )?;
        for (number, day) in DAYS.iter().enumerate() {
            self.post(number, day)?;
        }
        self.with_memory()?;
        self.history()?;
        self.rig_yield()
    }

    /// The first day once more, without the assumption that rounds are independent: what certifies is committed to before it begins.
    fn with_memory(&self) -> anyhow::Result<()> {
        let mut profile = self.get(&format!("/v1/rigs/{RIG}"))?;
        profile["rounds"] = json!("memory");
        let answer = self.agent.put(format!("{}/v1/rigs/{RIG}", self.base)).header("if-match", "\"1\"").send_json(profile)?;
        ensure!(answer.status() == 200, "the profile was not changed: {}", answer.status());
        let first = self.get(&format!("/v1/certifications?rig={RIG}&verdict=certified"))?;
        let first = first["items"].as_array().and_then(|items| items.last()).context("no day was certified")?;
        let order =
            json!({ "certification": first["id"], "setting_distribution": vec![vec![0.125; 2]; 4], "rounds": 8 * ROUNDS_PER_SETTING });
        writeln!(
            std::io::stdout(),
            "\nNow without assuming that rounds are independent; what certifies is committed to ahead of the data …"
        )?;
        let mut answer = self.agent.post(format!("{}/v1/rigs/{RIG}/commitments", self.base)).send_json(order)?;
        ensure!(answer.status() == 201, "nothing was committed: {}", answer.status());
        let committed: Value = answer.body_mut().read_json()?;
        let expected = committed["commitment"]["expected_bits"].as_f64().unwrap_or(0.0);
        writeln!(std::io::stdout(), "commitment {}: {expected} bits expected of a batch\n", committed["id"].as_str().unwrap_or("?"))?;
        // The simulated day takes no time at all; it begins when the commitment is on record.
        let begun = committed["recorded_at"].clone();
        let batch = json!({ "counts": counts(&DAYS[0], DAYS.len() as u64)?, "started_at": begun, "ended_at": begun });
        self.send("clear, again", "as the first day; the same assumptions but one", &batch)
    }

    fn get(&self, path: &str) -> anyhow::Result<Value> {
        let mut answer = self.agent.get(format!("{}{path}", self.base)).call()?;
        ensure!(answer.status() == 200, "{path} was answered with {}", answer.status());
        Ok(answer.body_mut().read_json()?)
    }

    fn declare(&self) -> anyhow::Result<()> {
        let profile = json!({
            "scenario": { "preparations": 4, "measurements": 2, "outcomes": 2, "carrier_dimension": 2, "leakage": DECLARED_LEAKAGE,
                          "leakage_holds": "on-average", "targets": [[0, 0]] },
            "rounds": "independent",
            "level": "standard",
            "outcome_labels": ["transmitted", "reflected"],
            "notes": "Simulated. Four polarisations 45 degrees apart, analysed at 0 or 45 degrees.",
        });
        let answer = self.agent.put(format!("{}/v1/rigs/{RIG}", self.base)).send_json(profile)?;
        ensure!(answer.status() == 201, "the rig was not accepted: {}", answer.status());
        writeln!(
            std::io::stdout(),
            "rig       {RIG}: 4 preparations, 2 measurements, qubit carrier, declared leakage {DECLARED_LEAKAGE:e},"
        )?;
        writeln!(
            std::io::stdout(),
            "          {ROUNDS_PER_SETTING} rounds per setting, target outcomes of preparation 0 with measurement 0\n"
        )?;
        Ok(())
    }

    fn post(&self, number: usize, day: &Day) -> anyhow::Result<()> {
        let batch = json!({
            "counts": counts(day, number as u64)?,
            "started_at": format!("2026-05-{:02}T06:00:00Z", number + 1),
            "ended_at": format!("2026-05-{:02}T18:00:00Z", number + 1),
        });
        self.send(day.name, day.story, &batch)
    }

    /// Posts a batch and prints its row.
    fn send(&self, name: &str, story: &str, batch: &Value) -> anyhow::Result<()> {
        write!(std::io::stdout(), "{name:<14} ")?;
        // The row is finished when the answer is in.
        std::io::stdout().flush()?;
        let request = self.agent.post(format!("{}/v1/rigs/{RIG}/batches", self.base)).header("idempotency-key", name.replace(", ", "-"));
        let mut answer = request.send_json(batch)?;
        let status = answer.status();
        let body: Value = answer.body_mut().read_json()?;
        let (record, why) = match status.as_u16() {
            201 => (body, String::new()),
            422 if body["certification"].is_string() => {
                let path = body["certification"].as_str().unwrap_or_default().to_owned();
                let why =
                    format!("\n{:15}{}: {}", "", body["reason"].as_str().unwrap_or("refused"), body["detail"].as_str().unwrap_or_default());
                (self.get(&path)?, why)
            }
            _ => bail!("the batch was answered with {status}: {body}"),
        };
        let per_round = record["bits_per_round"].as_f64().unwrap_or(0.0);
        let (verdict, bits) = (record["verdict"].as_str().unwrap_or("?"), record["certified_bits"].as_u64().unwrap_or(0));
        writeln!(std::io::stdout(), "{:>6} {verdict:>10} {bits:>12} {per_round:>10.6}   {story}{why}", status.as_u16())?;
        Ok(())
    }

    fn history(&self) -> anyhow::Result<()> {
        writeln!(std::io::stdout(), "\nhistory, newest first (GET /v1/certifications?rig={RIG})")?;
        let page = self.get(&format!("/v1/certifications?rig={RIG}&limit=10"))?;
        for record in page["items"].as_array().into_iter().flatten() {
            let bound = record["targets"][0]["guessing_probability_bound"].as_f64();
            writeln!(
                std::io::stdout(),
                "  {}  {:<10} {:<14} {}",
                record["id"].as_str().unwrap_or("?"),
                record["verdict"].as_str().unwrap_or("?"),
                record["reason"].as_str().unwrap_or("-"),
                match (bound, record["block"]["min_entropy"].as_f64()) {
                    (Some(bound), _) => format!("guessing probability at most {bound:.7}"),
                    (None, Some(bits)) => format!("min-entropy of the block at least {bits:.0} bits"),
                    (None, None) => "guessing probability not bounded".to_owned(),
                },
            )?;
        }
        Ok(())
    }

    fn rig_yield(&self) -> anyhow::Result<()> {
        writeln!(std::io::stdout(), "\nyield (GET /v1/rigs/{RIG}/yield?batches=10)")?;
        let sums = self.get(&format!("/v1/rigs/{RIG}/yield?batches=10"))?;
        writeln!(std::io::stdout(), "{}", serde_json::to_string_pretty(&sums)?)?;
        writeln!(std::io::stdout(), "\nCertified figures hold under the assumptions that each record lists, and only under them.")?;
        Ok(())
    }
}

/// Counts `[x][y][b]` of one day: preparation x encodes two bits, measurement y asks for one of them, and the answer is right with
/// probability ½[1 + v√(½ + 2ε(1−ε))], which the best source of leakage ε reaches.
fn counts(day: &Day, seed: u64) -> anyhow::Result<Vec<Vec<Vec<u64>>>> {
    let mut numbers = StdRng::seed_from_u64(0xb17a_55a7 + seed);
    let right = 0.5 * (1.0 + day.visibility * (0.5 + 2.0 * day.leakage * (1.0 - day.leakage)).sqrt());
    let mut table = Vec::new();
    for x in 0..4u8 {
        let mut row = Vec::new();
        for y in 0..2u8 {
            let zero = if x >> y & 1 == 0 { right } else { 1.0 - right };
            let n = Binomial::new(ROUNDS_PER_SETTING, zero).context("a probability is out of range")?.sample(&mut numbers);
            row.push(vec![n, ROUNDS_PER_SETTING - n]);
        }
        table.push(row);
    }
    Ok(table)
}
