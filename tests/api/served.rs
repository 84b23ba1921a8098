//! How answers are served: the page, the headers, and a real socket with its shutdown.

use std::io::{Read, Write};
use std::net::{SocketAddr, TcpStream};
use std::time::Duration;

use axum::http::StatusCode;
use tokio::sync::oneshot;

use fallowband::answers::serve;

use crate::support::{END_MS, at, get, service, state};

#[tokio::test]
async fn the_page_is_served_with_headers_that_keep_it_to_itself() {
    let page = get(&service(), "/").await;
    assert_eq!(page.status, StatusCode::OK);
    assert_eq!(page.header("content-type"), "text/html; charset=utf-8");
    assert_eq!(page.header("cache-control"), "no-cache");
    assert_eq!(page.text, include_str!("../../web/index.html"));
}

#[tokio::test]
async fn every_file_of_the_page_is_served_as_it_stands() {
    let folder = std::path::Path::new(env!("CARGO_MANIFEST_DIR")).join("web");
    let service = service();
    let mut count = 0;
    for entry in std::fs::read_dir(folder).unwrap() {
        let file = entry.unwrap().path();
        let media_type = match file.extension().and_then(|extension| extension.to_str()) {
            Some("html") => "text/html; charset=utf-8",
            Some("css") => "text/css; charset=utf-8",
            Some("js") => "text/javascript; charset=utf-8",
            Some("svg") => "image/svg+xml",
            _ => continue,
        };
        let name = file.file_name().unwrap().to_str().unwrap();
        let answer = get(&service, &format!("/{}", name.trim_start_matches("index.html"))).await;
        assert_eq!(answer.status, StatusCode::OK, "{name}");
        assert_eq!(answer.header("content-type"), media_type, "{name}");
        assert_eq!(answer.text, std::fs::read_to_string(&file).unwrap(), "{name}");
        count += 1;
    }
    assert!(count > 1, "the page has a script at least");
}

#[tokio::test]
async fn every_answer_carries_the_same_guards() {
    for path in ["/", "/v1/health", "/nowhere"] {
        let answer = get(&service(), path).await;
        let policy = answer.header("content-security-policy");
        for rule in ["default-src 'none'", "script-src 'self'", "frame-ancestors 'none'"] {
            assert!(policy.split("; ").any(|given| given == rule), "{path}: {policy}");
        }
        assert!(!policy.contains("unsafe"), "{path}: {policy}");
        assert_eq!(answer.header("x-content-type-options"), "nosniff", "{path}");
        assert_eq!(answer.header("referrer-policy"), "no-referrer", "{path}");
    }
}

/// Sends `request` and reads until the answer's last brace.
fn exchange(stream: &mut TcpStream, request: &str) -> String {
    stream.write_all(request.as_bytes()).unwrap();
    let mut answer = String::new();
    let mut buffer = [0_u8; 4096];
    while !answer.ends_with("}]}") {
        let count = stream.read(&mut buffer).unwrap();
        assert!(count > 0, "closed after: {answer}");
        answer.push_str(std::str::from_utf8(&buffer[..count]).unwrap());
    }
    answer
}

/// An asker that is answered and keeps its connection, behind one that never finishes its request.
fn ask(address: SocketAddr) -> (TcpStream, TcpStream) {
    let connect = || {
        let stream = TcpStream::connect(address).unwrap();
        stream.set_read_timeout(Some(Duration::from_secs(10))).unwrap();
        stream
    };
    let mut unfinished = connect();
    unfinished.write_all(b"GET /v1/no").unwrap();
    let mut kept = connect();
    let answer = exchange(&mut kept, "GET /v1/node HTTP/1.1\r\nHost: node\r\n\r\n");
    assert!(answer.starts_with("HTTP/1.1 200 OK\r\n"), "{answer}");
    assert!(answer.contains("\"site\":\"Quern Mill\""), "{answer}");
    (unfinished, kept)
}

#[tokio::test(flavor = "multi_thread", worker_threads = 2)]
async fn shutdown_over_a_real_socket_is_not_held_up_by_open_connections() {
    let listener = tokio::net::TcpListener::bind("127.0.0.1:0").await.unwrap();
    let address = listener.local_addr().unwrap();
    let (stop, stopped) = oneshot::channel::<()>();
    let server = tokio::spawn(serve(listener, state(10, at(END_MS + 250)), async move {
        stopped.await.unwrap();
    }));
    let (unfinished, mut kept) = tokio::task::spawn_blocking(move || ask(address)).await.unwrap();

    stop.send(()).unwrap();
    // The bar is 2 s.
    tokio::time::timeout(Duration::from_secs(2), server).await.expect("shutdown hangs").unwrap();

    let left = tokio::task::spawn_blocking(move || kept.read(&mut [0_u8; 16])).await.unwrap();
    assert_eq!(left.unwrap(), 0, "the kept connection is closed and says nothing more");
    assert!(TcpStream::connect(address).is_err(), "nobody listens any more");
    drop(unfinished);
}
