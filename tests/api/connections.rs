//! What clients do to connections.

use std::{
    io::{Read, Write},
    net::TcpStream,
    time::Duration,
};

use crate::server::{Running, with_rig};

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
    std::thread::sleep(Duration::from_millis(200));
    assert!(TcpStream::connect(running.address).is_err(), "a new connection was taken");
    stream.write_all(&body.as_bytes()[10..]).unwrap();
    let mut answer = String::new();
    stream.read_to_string(&mut answer).unwrap();
    assert!(answer.starts_with("HTTP/1.1 201 ") && answer.contains("connection: close"), "{answer}");
    running.stop();
}

#[test]
fn who_says_nothing_is_not_waited_for() {
    let running = Running::new();
    let begun = std::time::Instant::now();
    // One says nothing, the other stops in the middle.
    let streams = ["", "GET /livez HTTP/1.1\r\nHost: x\r\n"].map(|head| {
        let mut stream = TcpStream::connect(running.address).unwrap();
        stream.set_read_timeout(Some(Duration::from_secs(30))).unwrap();
        stream.write_all(head.as_bytes()).unwrap();
        stream
    });
    for mut stream in streams {
        // The server closes, with or without a word.
        stream.read_to_end(&mut vec![]).unwrap();
        assert!(begun.elapsed() < Duration::from_secs(15));
    }
}
