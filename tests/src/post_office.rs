//! A real mail server on loopback: the protocol is `mailin`'s, the lines and the faults are ours.

use mailin::{Action, AuthMechanism, Handler, Response, Session, SessionBuilder};
use std::collections::BTreeSet;
use std::io::{self, BufRead, BufReader, Read, Write};
use std::net::{Ipv4Addr, SocketAddr, TcpListener, TcpStream};
use std::path::{Path, PathBuf};
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Condvar, Mutex};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};

/// How lines to the server are protected, and whether it asks who is there.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Security {
    /// Neither TLS nor sign-in.
    Plain,
    /// STARTTLS, then sign-in.
    StartTls,
    /// TLS from the first byte, then sign-in.
    Wrapped,
}

/// A message that the server has taken.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct Mail {
    /// The sender on the envelope.
    pub from: String,
    /// The recipients on the envelope.
    pub to: Vec<String>,
    /// The message.
    pub bytes: Vec<u8>,
    /// Who signed in; the server offers that within TLS only.
    pub user: Option<String>,
}

impl Mail {
    /// A header's value.
    pub fn header(&self, name: &str) -> String {
        let text = String::from_utf8_lossy(&self.bytes);
        let start = format!("{}:", name.to_lowercase());
        let line = text.lines().find(|line| line.to_lowercase().starts_with(&start));
        line.map(|line| line[start.len()..].trim().to_owned()).unwrap_or_default()
    }
}

/// A place in the dialogue at which something can go wrong.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
#[allow(missing_docs, reason = "the protocol's own verbs")]
pub enum Verb {
    Connect,
    Ehlo,
    StartTls,
    Auth,
    Mail,
    Rcpt,
    Data,
    /// After the message's final dot.
    Dot,
    Quit,
}

impl Verb {
    /// All of them, in order.
    pub const ALL: [Verb; 9] = [
        Verb::Connect,
        Verb::Ehlo,
        Verb::StartTls,
        Verb::Auth,
        Verb::Mail,
        Verb::Rcpt,
        Verb::Data,
        Verb::Dot,
        Verb::Quit,
    ];
}

/// What goes wrong.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Fault {
    /// This reply instead of the right one; the server does not do what was asked.
    Says(&'static str),
    /// The line is cut. After the final dot the message has been taken.
    Drops,
    /// No reply, and the line stays open. After the final dot the message has been taken.
    Silence,
    /// The right reply, this late.
    Late(Duration),
}

#[derive(Debug, Default)]
struct Book {
    taken: Vec<Mail>,
    refused: BTreeSet<String>,
    faults: Vec<(Verb, Fault, usize)>,
    visits: usize,
}

#[derive(Debug, Default)]
struct Shared {
    book: Mutex<Book>,
    news: Condvar,
    closed: AtomicBool,
}

/// The server. It ends when it is dropped.
#[derive(Debug)]
pub struct PostOffice {
    address: SocketAddr,
    security: Security,
    tls: Arc<rustls::ServerConfig>,
    certificate: PathBuf,
    shared: Arc<Shared>,
    thread: Option<JoinHandle<()>>,
}

/// Whoever signs in with these is let in.
const USER: (&str, &str) = ("ebbmark", "tide-and-ebb");
/// No wait of a test is longer, unless what it waits for never comes.
const PATIENCE: Duration = Duration::from_secs(60);

impl PostOffice {
    /// Opens on a free port; writes its certificate and the password beside each other into `folder`.
    pub fn open(security: Security, folder: &Path) -> Self {
        let key = rcgen::generate_simple_self_signed(vec!["localhost".to_owned()]).unwrap();
        let certificate = folder.join("post-office.pem");
        std::fs::write(&certificate, key.cert.pem()).unwrap();
        std::fs::write(folder.join("mail-password"), USER.1).unwrap();
        let private =
            rustls::pki_types::PrivateKeyDer::Pkcs8(key.signing_key.serialize_der().into());
        let provider = Arc::new(rustls::crypto::ring::default_provider());
        let tls = rustls::ServerConfig::builder_with_provider(provider)
            .with_safe_default_protocol_versions()
            .unwrap()
            .with_no_client_auth()
            .with_single_cert(vec![key.cert.der().clone()], private)
            .unwrap();
        let listener = TcpListener::bind((Ipv4Addr::LOCALHOST, 0)).unwrap();
        let mut office = Self {
            address: listener.local_addr().unwrap(),
            security,
            tls: Arc::new(tls),
            certificate,
            shared: Arc::default(),
            thread: None,
        };
        office.serve(listener);
        office
    }

    /// The `[mail]` part of the settings that leads here.
    pub fn settings(&self) -> String {
        let port = self.address.port();
        let smtp = match self.security {
            Security::Plain => format!("host = \"127.0.0.1\"\nport = {port}\ntls = \"plain\"\n"),
            Security::StartTls | Security::Wrapped => {
                let tls = if self.security == Security::Wrapped { "wrapped" } else { "starttls" };
                format!(
                    "host = \"localhost\"\nport = {port}\ntls = \"{tls}\"\nca_file = \"{}\"\nuser = \"{}\"\npassword_file = \"mail-password\"\n",
                    self.certificate.display(),
                    USER.0
                )
            }
        };
        format!(
            "[mail]\nby = \"smtp\"\nfrom = \"ebbmark@saltmarsh.example\"\n[mail.smtp]\n{smtp}attempt_s = 3\n"
        )
    }

    /// Goes away: nobody listens on the port until it reopens.
    pub fn close(&mut self) {
        self.shared.closed.store(true, Ordering::SeqCst);
        // The listener looks at `closed` after each visit: visit it.
        let _ = TcpStream::connect(self.address);
        if let Some(thread) = self.thread.take() {
            thread.join().unwrap();
        }
    }

    /// Comes back on the same port.
    pub fn reopen(&mut self) {
        self.shared.closed.store(false, Ordering::SeqCst);
        self.serve(TcpListener::bind(self.address).unwrap());
    }

    /// Refuses this recipient for good from now on.
    pub fn refuse(&self, recipient: &str) {
        self.shared.book.lock().unwrap().refused.insert(recipient.to_owned());
    }

    /// From now on this goes wrong at this verb, so many times.
    pub fn fault(&self, verb: Verb, fault: Fault, times: usize) {
        self.shared.book.lock().unwrap().faults.push((verb, fault, times));
    }

    /// Waits until every fault has happened.
    pub fn wait_faults(&self) {
        let until = Instant::now() + PATIENCE;
        let mut book = self.shared.book.lock().unwrap();
        while book.faults.iter().any(|(.., times)| *times > 0) {
            let left = until.saturating_duration_since(Instant::now());
            assert!(!left.is_zero(), "faults that never happened: {:?}", book.faults);
            book = self.shared.news.wait_timeout(book, left).unwrap().0;
        }
    }

    /// What was taken so far.
    pub fn taken(&self) -> Vec<Mail> {
        self.shared.book.lock().unwrap().taken.clone()
    }

    /// How many lines were opened so far.
    pub fn visits(&self) -> usize {
        self.shared.book.lock().unwrap().visits
    }

    /// Waits until the messages taken, and the visits, are as `enough` wants them.
    pub fn wait(&self, what: &str, enough: impl Fn(&[Mail], usize) -> bool) {
        let until = Instant::now() + PATIENCE;
        let mut book = self.shared.book.lock().unwrap();
        while !enough(&book.taken, book.visits) {
            let left = until.saturating_duration_since(Instant::now());
            let to: Vec<_> = book.taken.iter().map(|mail| mail.to.join(" ")).collect();
            assert!(!left.is_zero(), "{what} did not come; {} visits, taken: {to:?}", book.visits);
            book = self.shared.news.wait_timeout(book, left).unwrap().0;
        }
    }

    fn serve(&mut self, listener: TcpListener) {
        let (shared, security, tls) = (self.shared.clone(), self.security, self.tls.clone());
        self.thread = Some(std::thread::spawn(move || {
            for stream in listener.incoming() {
                if shared.closed.load(Ordering::SeqCst) {
                    return;
                }
                let (Ok(stream), shared, tls) = (stream, shared.clone(), tls.clone()) else {
                    continue;
                };
                std::thread::spawn(move || {
                    shared.book.lock().unwrap().visits += 1;
                    shared.news.notify_all();
                    // A visitor who hangs up is no fault of the server's.
                    let _ = Visit::new(&shared, security, tls).receive(stream);
                });
            }
        }));
    }
}

impl Drop for PostOffice {
    fn drop(&mut self) {
        self.close();
    }
}

/// One line to the server.
struct Visit {
    shared: Arc<Shared>,
    session: Session<Clerk>,
    security: Security,
    tls: Arc<rustls::ServerConfig>,
}

impl Visit {
    fn new(shared: &Arc<Shared>, security: Security, tls: Arc<rustls::ServerConfig>) -> Self {
        let mut builder = SessionBuilder::new("post.saltmarsh.example");
        if security != Security::Plain {
            builder.enable_auth(AuthMechanism::Plain);
        }
        if security == Security::StartTls {
            builder.enable_start_tls();
        }
        let clerk = Clerk { shared: shared.clone(), mail: Mail::default() };
        let session = builder.build(Ipv4Addr::LOCALHOST.into(), clerk);
        Self { shared: shared.clone(), session, security, tls }
    }

    fn receive(mut self, stream: TcpStream) -> io::Result<()> {
        stream.set_nodelay(true)?;
        if self.security == Security::Wrapped {
            let mut line = BufReader::new(self.encrypt(stream)?);
            let greeting = self.session.greeting();
            if !self.reply(Verb::Connect, &mut line, &greeting)? {
                return Ok(());
            }
            return self.talk(&mut line, &mut Default::default()).map(|_| ());
        }
        let mut line = BufReader::new(stream);
        let greeting = self.session.greeting();
        if !self.reply(Verb::Connect, &mut line, &greeting)? {
            return Ok(());
        }
        if self.talk(&mut line, &mut Default::default())? {
            let mut line = BufReader::new(self.encrypt(line.into_inner())?);
            self.talk(&mut line, &mut Default::default())?;
        }
        Ok(())
    }

    fn encrypt(
        &mut self,
        stream: TcpStream,
    ) -> io::Result<rustls::StreamOwned<rustls::ServerConnection, TcpStream>> {
        let connection =
            rustls::ServerConnection::new(self.tls.clone()).map_err(io::Error::other)?;
        self.session.tls_active();
        Ok(rustls::StreamOwned::new(connection, stream))
    }

    /// Until the line ends, or (then `true`) is to be encrypted.
    fn talk<S: Read + Write>(
        &mut self,
        line: &mut BufReader<S>,
        text: &mut Vec<u8>,
    ) -> io::Result<bool> {
        let mut in_message = false;
        loop {
            text.clear();
            if line.read_until(b'\n', text)? == 0 {
                return Ok(false);
            }
            let verb = if in_message { Some(Verb::Dot) } else { verb(text) };
            // What the server does not do must not happen in its session either.
            let instead =
                verb.filter(|verb| !in_message || (*verb == Verb::Dot && text == b".\r\n"));
            if let Some(says) = instead.and_then(|verb| self.shared.says(verb)) {
                line.get_mut().write_all(format!("{says}\r\n").as_bytes())?;
                if in_message {
                    // The session would take whatever comes next for more of the message.
                    return Ok(false);
                }
                continue;
            }
            let response = self.session.process(text);
            if response.action == Action::NoReply {
                continue;
            }
            in_message = response.code == 354;
            if !self.reply(verb.unwrap_or(Verb::Quit), line, &response)? {
                return Ok(false);
            }
            match response.action {
                Action::UpgradeTls => return Ok(true),
                Action::Close => return Ok(false),
                Action::NoReply | Action::Reply => {}
            }
        }
    }

    /// Replies unless a fault says otherwise; `false` where the line is cut.
    fn reply<S: Write + Read>(
        &self,
        verb: Verb,
        line: &mut BufReader<S>,
        response: &Response,
    ) -> io::Result<bool> {
        let fault = self.shared.next_fault(verb);
        match fault {
            Some(Fault::Drops) => return Ok(false),
            Some(Fault::Says(words)) => {
                line.get_mut().write_all(format!("{words}\r\n").as_bytes())?;
                return Ok(verb != Verb::Connect);
            }
            Some(Fault::Silence) => {
                // Until the visitor gives up.
                let _ = line.read_to_end(&mut Vec::new());
                return Ok(false);
            }
            Some(Fault::Late(wait)) => std::thread::sleep(wait),
            None => {}
        }
        response.write_to(line.get_mut())?;
        line.get_mut().flush()?;
        Ok(true)
    }
}

fn verb(text: &[u8]) -> Option<Verb> {
    let word = text.split(|byte| byte.is_ascii_whitespace()).next()?;
    Some(match word.to_ascii_uppercase().as_slice() {
        b"EHLO" | b"HELO" => Verb::Ehlo,
        b"STARTTLS" => Verb::StartTls,
        b"AUTH" => Verb::Auth,
        b"MAIL" => Verb::Mail,
        b"RCPT" => Verb::Rcpt,
        b"DATA" => Verb::Data,
        b"QUIT" => Verb::Quit,
        _ => return None,
    })
}

impl Shared {
    fn next_fault(&self, at: Verb) -> Option<Fault> {
        let mut book = self.book.lock().unwrap();
        let found = book.faults.iter_mut().find(|(verb, _, times)| *verb == at && *times > 0)?;
        found.2 -= 1;
        let fault = found.1.clone();
        self.news.notify_all();
        Some(fault)
    }

    /// The words that stand in for the right answer, if a fault gives some.
    fn says(&self, at: Verb) -> Option<&'static str> {
        let mut book = self.book.lock().unwrap();
        let found = book.faults.iter_mut().find(|(verb, fault, times)| {
            *verb == at && *times > 0 && matches!(fault, Fault::Says(_))
        })?;
        found.2 -= 1;
        let Fault::Says(words) = found.1 else { return None };
        self.news.notify_all();
        Some(words)
    }
}

/// What the server does with what it is told.
struct Clerk {
    shared: Arc<Shared>,
    mail: Mail,
}

impl Handler for Clerk {
    fn mail(&mut self, _: std::net::IpAddr, _: &str, from: &str) -> Response {
        self.mail = Mail { from: from.to_owned(), user: self.mail.user.clone(), ..Mail::default() };
        mailin::response::OK
    }

    fn rcpt(&mut self, to: &str) -> Response {
        if self.shared.book.lock().unwrap().refused.contains(to) {
            return Response::custom(550, "5.1.1 nobody of that name".to_owned());
        }
        self.mail.to.push(to.to_owned());
        mailin::response::OK
    }

    fn data(&mut self, line: &[u8]) -> io::Result<()> {
        self.mail.bytes.extend_from_slice(line);
        Ok(())
    }

    fn data_end(&mut self) -> Response {
        self.shared.book.lock().unwrap().taken.push(self.mail.clone());
        self.shared.news.notify_all();
        mailin::response::OK
    }

    fn auth_plain(&mut self, _: &str, user: &str, password: &str) -> Response {
        if (user, password) != USER {
            return mailin::response::INVALID_CREDENTIALS;
        }
        self.mail.user = Some(user.to_owned());
        mailin::response::AUTH_OK
    }
}
