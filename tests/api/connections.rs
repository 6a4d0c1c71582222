//! What clients do to connections.

use std::{
    io::{Read, Write},
    net::TcpStream,
    time::Duration,
};

use bitassay::http::limits::Limits;
use serde_json::Value;

use crate::server::{Running, Solving, batch, profile, with_rig};

/// A server that is patient for a moment only.
fn impatient() -> Running {
    let moment = Duration::from_millis(300);
    Running::limited(Limits { head: moment, body: moment, answer: moment, ..Limits::default() })
}

/// Sends a byte at a time, slower than the server has patience; answers with what came back until the server closed.
fn trickle(running: &Running, head: &str, rest: &str) -> String {
    let mut stream = TcpStream::connect(running.address).unwrap();
    stream.set_read_timeout(Some(Duration::from_secs(20))).unwrap();
    stream.write_all(head.as_bytes()).unwrap();
    for byte in rest.as_bytes() {
        if stream.write_all(&[*byte]).is_err() {
            break;
        }
        std::thread::sleep(Duration::from_millis(50));
    }
    let mut answer = vec![];
    // A server that closes while bytes are under way is heard as a reset.
    let _ = stream.read_to_end(&mut answer);
    String::from_utf8(answer).unwrap()
}

/// Sends bytes as they are; answers with everything that comes back until the server is silent for a moment or closes.
fn raw(running: &Running, text: &str) -> String {
    let mut stream = TcpStream::connect(running.address).unwrap();
    stream.set_read_timeout(Some(Duration::from_secs(2))).unwrap();
    stream.write_all(text.as_bytes()).unwrap();
    let (mut answer, mut buffer) = (vec![], [0; 4096]);
    while let Ok(n) = stream.read(&mut buffer) {
        if n == 0 {
            break;
        }
        answer.extend_from_slice(&buffer[..n]);
        if answer.windows(4).any(|window| window == b"\r\n\r\n") && answer.ends_with(b"}") {
            break;
        }
    }
    String::from_utf8(answer).unwrap()
}

#[test]
fn a_body_without_a_stated_length_is_limited_too() {
    let (running, _client) = with_rig();
    let head = "PUT /v1/rigs/bench HTTP/1.1\r\nHost: x\r\nContent-Type: application/json\r\nTransfer-Encoding: chunked\r\n\r\n";
    let chunk = format!("10000\r\n{}\r\n", " ".repeat(0x10000));
    let answer = raw(&running, &format!("{head}{}0\r\n\r\n", chunk.repeat(5)));
    assert!(answer.starts_with("HTTP/1.1 413 "), "{answer}");
    assert!(answer.contains("application/problem+json"), "{answer}");
}

#[test]
fn a_stated_length_above_the_limit_is_turned_away_at_once() {
    let (running, _client) = with_rig();
    let head = "PUT /v1/rigs/bench HTTP/1.1\r\nHost: x\r\nContent-Type: application/json\r\nContent-Length: 100000000\r\n\r\n";
    let answer = raw(&running, head);
    assert!(answer.starts_with("HTTP/1.1 413 "), "{answer}");
}

#[test]
fn a_body_that_ends_early_is_no_body() {
    let (running, client) = with_rig();
    let mut stream = TcpStream::connect(running.address).unwrap();
    stream
        .write_all(b"PUT /v1/rigs/fresh HTTP/1.1\r\nHost: x\r\nContent-Type: application/json\r\nContent-Length: 500\r\n\r\n{\"scenario\"")
        .unwrap();
    drop(stream);
    client.get("/v1/rigs/fresh").expect(404);
}

#[test]
fn an_idle_connection_does_not_keep_the_server_from_stopping() {
    let running = Running::new();
    let client = running.client();
    client.get("/livez").expect(200);
    let idle = TcpStream::connect(running.address).unwrap();
    let begun = std::time::Instant::now();
    running.stop();
    assert!(begun.elapsed() < Duration::from_secs(5));
    drop(idle);
    drop(client);
}

#[test]
fn a_stopping_server_hears_out_who_has_begun() {
    let mut running = Running::new();
    let body = crate::server::profile().to_string();
    let mut stream = TcpStream::connect(running.address).unwrap();
    let head =
        format!("PUT /v1/rigs/bench HTTP/1.1\r\nHost: x\r\nContent-Type: application/json\r\nContent-Length: {}\r\n\r\n", body.len());
    stream.write_all(head.as_bytes()).unwrap();
    stream.write_all(&body.as_bytes()[..10]).unwrap();
    std::thread::sleep(Duration::from_millis(200));
    running.signal();
    // The server hears the signal in its own time; from then on it takes nobody.
    let closed = (0..200).any(|_| {
        std::thread::sleep(Duration::from_millis(50));
        TcpStream::connect(running.address).is_err()
    });
    assert!(closed, "new connections are still taken");
    stream.write_all(&body.as_bytes()[10..]).unwrap();
    let mut answer = String::new();
    stream.read_to_string(&mut answer).unwrap();
    assert!(answer.starts_with("HTTP/1.1 201 ") && answer.contains("connection: close"), "{answer}");
    running.stop();
}

#[test]
fn who_says_nothing_is_not_waited_for() {
    let running = impatient();
    let mut stream = TcpStream::connect(running.address).unwrap();
    stream.set_read_timeout(Some(Duration::from_secs(20))).unwrap();
    // The server closes, with or without a word.
    stream.read_to_end(&mut vec![]).unwrap();
    running.client().get("/livez").expect(200);
}

#[test]
fn who_never_finishes_the_head_is_not_waited_for() {
    let running = impatient();
    let answer = trickle(&running, "GET /livez HTTP/1.1\r\n", &"X-Slow: 1\r\n".repeat(20));
    assert!(!answer.contains(" 200 "), "{answer}");
}

#[test]
fn who_never_finishes_the_body_is_told_so() {
    let running = impatient();
    let head = "PUT /v1/rigs/bench HTTP/1.1\r\nHost: x\r\nContent-Type: application/json\r\nContent-Length: 500\r\n\r\n";
    let answer = trickle(&running, head, &" ".repeat(20));
    assert!(answer.starts_with("HTTP/1.1 408 ") && answer.contains("application/problem+json"), "{answer}");
}

#[test]
fn a_kept_connection_may_not_lie_idle_for_ever() {
    let running = impatient();
    let mut stream = TcpStream::connect(running.address).unwrap();
    stream.set_read_timeout(Some(Duration::from_secs(20))).unwrap();
    stream.write_all(b"GET /livez HTTP/1.1\r\nHost: x\r\n\r\n").unwrap();
    let mut answer = String::new();
    stream.read_to_string(&mut answer).unwrap();
    assert!(answer.starts_with("HTTP/1.1 200 "), "{answer}");
}

/// A client that asks for much and takes none of it gives its place back.
#[test]
fn who_takes_no_answer_is_not_waited_for() {
    let running = impatient();
    let client = running.client();
    client.put_rig("bench", &profile(), &[]).expect(201);
    for i in 0..60 {
        client.post_batch("bench", &i.to_string(), &batch(1000 + 2 * i)).expect(201);
    }
    let asked = "GET /v1/certifications?limit=200 HTTP/1.1\r\nHost: x\r\n\r\n".repeat(2000);
    let mut stream = TcpStream::connect(running.address).unwrap();
    stream.set_write_timeout(Some(Duration::from_secs(1))).unwrap();
    let _ = stream.write_all(asked.as_bytes());
    let mut connections = open_connections(&running);
    for _ in 0..100 {
        if connections <= 2 {
            break;
        }
        std::thread::sleep(Duration::from_millis(100));
        connections = open_connections(&running);
    }
    // The client's own, perhaps two of them; not the one that takes nothing.
    assert!(connections <= 2, "{connections}");
    drop(stream);
}

fn open_connections(running: &Running) -> usize {
    let text = running.client().get("/metrics").expect(200).text().to_owned();
    text.lines().find_map(|line| line.strip_prefix("bitassay_connections ")).unwrap().parse().unwrap()
}

/// A thousand who say nothing take nobody's place.
#[cfg(unix)]
#[test]
fn a_thousand_idle_connections_are_no_burden() {
    // Both ends are in this process.
    rlimit::increase_nofile_limit(4000).unwrap();
    let (running, client) = with_rig();
    let idle: Vec<TcpStream> = (0..1000).map(|_| TcpStream::connect(running.address).unwrap()).collect();
    client.get("/livez").expect(200);
    client.get("/v1/certifications").expect(200);
    client.post_batch("bench", "k", &batch(1000)).expect(201);
    assert!(open_connections(&running) >= 1000);
    drop(idle);
}

/// Above the number that is served, whoever watches still learns that the service is alive; everybody else is told to come again.
#[test]
fn too_many_connections_are_told_so() {
    let running = Running::limited(Limits { connections: 20, ..Limits::default() });
    let idle: Vec<TcpStream> = (0..20).map(|_| TcpStream::connect(running.address).unwrap()).collect();
    let client = running.client();
    client.get("/livez").expect(200);
    client.get("/readyz").expect(200);
    client.get("/metrics").expect(200);
    let turned_away = client.get("/v1/rigs").expect(503);
    assert_eq!(turned_away.header("retry-after"), Some("5"));
    assert_eq!(turned_away.header("connection"), Some("close"));
    drop(idle);
    // The server hears of it in its own time.
    let served = (0..100).any(|_| {
        std::thread::sleep(Duration::from_millis(50));
        running.client().get("/v1/rigs").status == 200
    });
    assert!(served);
}

#[test]
fn ten_megabytes_are_turned_away_with_a_word() {
    let (running, client) = with_rig();
    let before = running.rows();
    let padded = format!("{}{}", " ".repeat(10_000_000), batch(1000));
    let headers = [("content-type", "application/json"), ("idempotency-key", "big")];
    let answer = client.call("POST", "/v1/rigs/bench/batches", &headers, Some(padded.as_bytes())).expect(413);
    assert_eq!(answer.header("content-type"), Some("application/problem+json"));
    assert_eq!(running.rows(), before);
}

#[test]
fn deep_nesting_is_malformed_and_nothing_worse() {
    let (_running, client) = with_rig();
    let headers = [("content-type", "application/json"), ("idempotency-key", "deep")];
    for (open, close) in [("[", "]"), ("{\"a\":", "}"), ("{\"counts\":[", "]}")] {
        let text = format!("{}0{}", open.repeat(50_000), close.repeat(50_000));
        for (method, path) in
            [("POST", "/v1/rigs/bench/batches"), ("PUT", "/v1/rigs/bench"), ("POST", "/v1/leakage"), ("POST", "/v1/rigs/bench/commitments")]
        {
            let answer = client.call(method, path, &headers, Some(text.as_bytes()));
            assert!(matches!(answer.status, 400 | 413), "{method} {path}: {}", answer.text());
        }
    }
    // As the value of a member that takes any value.
    let text = format!("{{\"counts\":{}0{}}}", "[".repeat(50_000), "]".repeat(50_000));
    client.call("POST", "/v1/rigs/bench/batches", &headers, Some(text.as_bytes())).expect(400);
    client.get("/livez").expect(200);
}

#[test]
fn too_many_requests_of_one_client_are_turned_away() {
    let (rate, burst) = (1.try_into().unwrap(), 5.try_into().unwrap());
    let running = Running::limited(Limits { rate, burst, ..Limits::default() });
    let client = running.client();
    let statuses: Vec<u16> = (0..20).map(|_| client.get("/v1/rigs").status).collect();
    assert_eq!(statuses[..5], [200; 5]);
    assert!(statuses.contains(&429), "{statuses:?}");
    let refused = client.get("/v1/rigs").expect(429);
    let seconds: u64 = refused.header("retry-after").unwrap().parse().unwrap();
    assert!((1..=2).contains(&seconds));
    // Whoever watches is never one too many.
    (0..20).for_each(|_| drop(client.get("/livez").expect(200)));
    // Tokens count for themselves, those who guess for their peer.
    let (_, first) = crate::access::create(&running, bitassay::token::Role::Auditor, &[], None);
    client.presenting(&first).get("/v1/rigs").expect(200);
    client.presenting("bitassay_0").get("/v1/rigs").expect(429);
    let text = client.get("/metrics").text().to_owned();
    let limited = text.lines().find_map(|line| line.strip_prefix("bitassay_requests_limited_total ")).unwrap();
    assert!(limited.parse::<u32>().unwrap() >= 2, "{limited}");
}

/// With all solvers at work and the queue full, the history still answers.
#[test]
fn a_full_queue_leaves_the_history_alone() {
    let (release, hold) = std::sync::mpsc::channel::<()>();
    let hold = std::sync::Mutex::new(hold);
    let certifier = std::sync::Arc::new(move |request: &bitassay::request::Request| {
        let _ = hold.lock().unwrap().recv();
        crate::server::stand_in(request)
    });
    let running = Running::solving(Solving { certifier, threads: 1, queue: 2, ..Solving::default() });
    let client = running.client();
    client.put_rig("bench", &profile(), &[]).expect(201);
    let posters: Vec<_> = (0..10)
        .map(|i| {
            let client = client.clone();
            std::thread::spawn(move || client.post_batch("bench", &format!("{i}"), &batch(1000)))
        })
        .collect();
    let full = (0..1000).any(|i| {
        std::thread::sleep(Duration::from_millis(10));
        let _ = i;
        let text = client.get("/metrics").expect(200).text().to_owned();
        text.contains("route=\"/v1/rigs/{rig}/batches\",status=\"503\"")
    });
    assert!(full);
    for path in ["/livez", "/readyz", "/v1/certifications", "/v1/rigs/bench/yield"] {
        client.get(path).expect(200);
    }
    drop(release);
    let statuses: Vec<u16> = posters.into_iter().map(|poster| poster.join().unwrap().status).collect();
    assert!(
        statuses.iter().all(|status| matches!(status, 201 | 503)) && statuses.contains(&201) && statuses.contains(&503),
        "{statuses:?}"
    );
}

#[test]
fn a_request_has_a_name() {
    let running = Running::new();
    let client = running.client();
    let given = client.call("GET", "/livez", &[("x-request-id", "shift-7.042")], None);
    assert_eq!(given.header("x-request-id"), Some("shift-7.042"));
    for bad in ["a b", "\"quoted\"", &"x".repeat(65)] {
        let answer = client.call("GET", "/nowhere", &[("x-request-id", bad)], None).expect(404);
        let made = answer.header("x-request-id").unwrap();
        assert!(uuid::Uuid::try_parse(made).is_ok(), "{made}");
    }
    let problem: Value = client.get("/nowhere").json();
    assert_eq!(problem["status"], 404);
}
