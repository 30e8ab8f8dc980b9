// The bench screen's script. Everything works without it, except that a page
// then does not renew itself. It holds no state that matters: the record is the
// station's, and after a lost connection the page is brought up to date by it.
"use strict";
(() => {
  const body = document.body;
  const byId = (id) => document.getElementById(id);
  const words = byId("words").dataset;
  const code = byId("code");
  const say = (text, value) => text.replace("{}", value);

  // ---- numbers and times as the reader writes them; on the screen only ----
  const formats = new Map();
  const number = (text) => {
    const value = Number(text);
    if (text === "" || !Number.isFinite(value)) return text;
    const places = Math.min((text.split(".")[1] || "").length, 12);
    if (!formats.has(places)) {
      formats.set(places, new Intl.NumberFormat(undefined, { minimumFractionDigits: places, maximumFractionDigits: places, useGrouping: false }));
    }
    return formats.get(places).format(value);
  };
  const clock = new Intl.DateTimeFormat(undefined, { hour: "2-digit", minute: "2-digit" });
  const exact = new Intl.DateTimeFormat(undefined, { hour: "2-digit", minute: "2-digit", second: "2-digit" });
  const both = new Intl.DateTimeFormat(undefined, { month: "short", day: "numeric", hour: "2-digit", minute: "2-digit" });
  const full = new Intl.DateTimeFormat(undefined, { year: "numeric", month: "short", day: "numeric", hour: "2-digit", minute: "2-digit", timeZoneName: "short" });
  let ahead = Date.parse(body.dataset.now) - Date.now() || 0; // how far the station's clock is ahead
  const now = () => Date.now() + ahead;
  const dress = (root) => {
    for (const e of root.querySelectorAll("[data-print]")) e.hidden = false;
    for (const e of root.querySelectorAll("[data-number]")) e.textContent = number(e.dataset.number);
    for (const e of root.querySelectorAll("time[data-time]")) {
      const at = new Date(e.dateTime);
      if (isNaN(at)) continue;
      e.textContent = ({ both, full }[e.dataset.time] || clock).format(at);
      e.title = at.toISOString();
    }
  };
  const passing = () => {
    for (const e of document.querySelectorAll('time[data-time="ago"]')) {
      const minutes = Math.max(0, Math.floor((now() - Date.parse(e.dateTime)) / 60000));
      e.textContent = `${clock.format(new Date(e.dateTime))} (${say(words.ago, minutes)})`;
    }
  };

  // ---- sounds, that can be turned off ----
  const sound = byId("sound");
  let loud = true;
  try { loud = localStorage.getItem("sound") !== "off"; } catch { /* no store: sound is on */ }
  const showSound = () => {
    sound.hidden = false;
    sound.setAttribute("aria-pressed", String(loud));
    sound.lastElementChild.textContent = loud ? sound.dataset.on : sound.dataset.off;
  };
  sound.addEventListener("click", () => {
    loud = !loud;
    try { localStorage.setItem("sound", loud ? "on" : "off"); } catch { /* kept for this page only */ }
    showSound();
    if (loud) beep(true);
  });
  let audio;
  const beep = (good) => {
    if (!loud || !window.AudioContext) return;
    try {
      audio = audio || new AudioContext();
      audio.resume();
      // One high tone: recorded. Two low ones: refused, a person is needed.
      for (const [from, pitch] of good ? [[0, 1050]] : [[0, 330], [0.2, 260]]) {
        const tone = audio.createOscillator(), gain = audio.createGain();
        tone.frequency.value = pitch;
        gain.gain.setValueAtTime(0.2, audio.currentTime + from);
        gain.gain.exponentialRampToValueAtTime(0.001, audio.currentTime + from + 0.16);
        tone.connect(gain).connect(audio.destination);
        tone.start(audio.currentTime + from);
        tone.stop(audio.currentTime + from + 0.17);
      }
    } catch { /* no sound device */ }
  };

  // ---- live values: kept apart, so that a renewed region gets them back ----
  const lives = new Map();
  const slot = (root, name) => root.querySelector(`[data-slot="${name}"]`);
  const put = (e, text) => { if (e) { e.dataset.number = text; e.textContent = number(text); } };
  const instrument = (name) => document.querySelector(`[data-instrument="${CSS.escape(name)}"]`);
  const freshen = (e, live) => {
    const state = e.querySelector("h2 .state");
    e.dataset.state = live ? "live" : "stale";
    if (state && live && (state.dataset.state === "stale" || state.dataset.state === "never")) {
      state.dataset.state = "live";
      state.querySelector("svg").innerHTML = '<circle class="solid" cx="12" cy="12" r="7"/>';
      while (state.children.length > 2) state.lastElementChild.remove();
      state.children[1].textContent = words.live;
      for (const text of [...state.childNodes].filter((n) => n.nodeType === 3)) text.remove();
    }
  };
  const showLive = (name) => {
    const e = instrument(name), v = lives.get(name);
    if (!e || !v) return;
    if (v.mass_g !== undefined) {
      slot(e, "mass").classList.toggle("many", String(v.mass_g).length > 6);
      put(slot(e, "mass"), String(v.mass_g));
      e.dataset.steady = v.steady;
      slot(e, "steady").textContent = words[v.steady] || "";
    }
    if (v.drops !== undefined) {
      slot(e, "drops").textContent = v.drops;
      const rate = slot(e, "rate"), known = typeof v.rate_per_s === "number";
      if (known) put(rate, v.rate_per_s.toFixed(2)); else { delete rate.dataset.number; rate.textContent = "–"; }
      const off = known && e.dataset.rateFrom && (v.rate_per_s < Number(e.dataset.rateFrom) || v.rate_per_s > Number(e.dataset.rateTo));
      rate.closest(".rest").dataset.rate = off ? "off" : "well";
    }
    if (v.fresh) freshen(e, true);
  };
  for (const e of document.querySelectorAll("[data-instrument]")) {
    const mass = slot(e, "mass"), drops = slot(e, "drops"), v = {};
    if (mass && mass.dataset.number) Object.assign(v, { mass_g: mass.dataset.number, steady: e.dataset.steady });
    if (drops && drops.textContent !== "–") Object.assign(v, { drops: Number(drops.textContent), rate_per_s: Number(slot(e, "rate").dataset.number) || null });
    if (Object.keys(v).length) lives.set(e.dataset.instrument, v);
  }

  // ---- regions: replaced, and what a person has begun to fill in is kept ----
  let shown = Number(body.dataset.seq) || 0;
  const key = (field) => (field.form ? `${field.form.dataset.ask} ${field.id || field.name} ${field.type === "radio" ? field.value : ""}` : null);
  const replace = (id, html, seq) => {
    const region = byId(`region-${id}`);
    if (!region || seq < shown) return;
    const open = [...region.querySelectorAll("details[open]")].map((d) => d.id);
    const kept = new Map();
    for (const f of region.querySelectorAll("input:not([type=hidden]), textarea")) {
      if (f.value !== f.defaultValue || f.checked !== f.defaultChecked) kept.set(key(f), [f.value, f.checked]);
    }
    const at = region.contains(document.activeElement) ? document.activeElement : null;
    const focus = at && { id: at.id, key: at.form && key(at), start: at.selectionStart, text: at.textContent };
    const was = region.querySelector("[data-recorded]");
    region.innerHTML = html;
    for (const one of open) { const d = one && byId(one); if (d) d.open = true; }
    for (const f of region.querySelectorAll("input:not([type=hidden]), textarea")) {
      const k = kept.get(key(f));
      if (k) [f.value, f.checked] = k;
    }
    if (focus) {
      const again = (focus.id && byId(focus.id)) || [...region.querySelectorAll("input, button, summary, a")].find((e) => (e.form && e.name && key(e) === focus.key) || e.textContent === focus.text);
      if (again) { again.focus(); if (typeof focus.start === "number") try { again.setSelectionRange(focus.start, focus.start); } catch { /* no text */ } } else home();
    }
    dress(region);
    passing();
    if (id === "live") for (const name of lives.keys()) showLive(name);
    if (id === "recorded") {
      const is = region.querySelector("[data-recorded]");
      if (is && (!was || was.dataset.recorded !== is.dataset.recorded)) {
        beep(!is.classList.contains("is-loose"));
        is.classList.add("fresh");
        setTimeout(() => is.classList.remove("fresh"), 4000);
      }
    }
    if (id === "next" && region.querySelector(".urgent")) beep(false);
  };

  // ---- the connection: a beat each second; none for three, and the page greys ----
  let beat = Date.now(), source;
  const lost = byId("lost");
  const connected = (is) => {
    if ((body.dataset.connection === "live") === is) return;
    body.dataset.connection = is ? "live" : "lost";
    lost.hidden = is;
    if (is) {
      for (const name of lives.keys()) showLive(name);
    } else {
      slot(lost, "lost").textContent = say(words.since, exact.format(new Date(beat + ahead)));
      for (const v of lives.values()) v.fresh = false;
      for (const e of document.querySelectorAll("[data-instrument]")) e.dataset.state = "stale";
      for (const s of document.querySelectorAll(".state[data-state=live], .state[data-state=speaking]")) {
        s.dataset.state = "stale";
        s.querySelector("svg").innerHTML = '<circle cx="12" cy="12" r="8"/><path d="M12 7v5l4 2"/>';
        const text = s.querySelector("span");
        if (text) text.textContent = `${words.stale} ${clock.format(new Date(beat + ahead))}`;
      }
    }
  };
  // A slice that is owed for long calls out until somebody comes.
  setInterval(() => { if (body.dataset.connection === "live" && document.querySelector('[data-owed="overdue"]')) beep(false); }, 20000);
  const parse = (event) => { try { return JSON.parse(event.data); } catch { return null; } };
  const listen = () => {
    if (!body.dataset.events) return;
    const join = body.dataset.events.includes("?") ? "&" : "?";
    source = new EventSource(`${body.dataset.events}${join}after=${shown}`);
    source.addEventListener("region", (event) => {
      const r = parse(event);
      if (r) { replace(r.id, r.html, Number(r.seq) || 0); shown = Math.max(shown, Number(r.seq) || 0); }
    });
    source.addEventListener("live", (event) => {
      const v = parse(event);
      if (!v || !v.instrument) return;
      lives.set(v.instrument, Object.assign(lives.get(v.instrument) || {}, v, { fresh: true }));
      showLive(v.instrument);
    });
    source.addEventListener("beat", (event) => {
      const b = parse(event) || {};
      beat = Date.now();
      if (b.now) ahead = Date.parse(b.now) - beat || 0;
      connected(true);
      passing();
    });
  };
  setInterval(() => {
    if (!source || Date.now() - beat <= 2500) return;
    connected(false);
    // A source that gave up does not come back by itself.
    if (source.readyState === 2 || Date.now() - beat > 5000) { source.close(); beat = Date.now() - 2600; listen(); }
  }, 250);

  // ---- asks ----
  const answer = byId("region-answer");
  let clearing;
  const tell = (text, good) => {
    answer.textContent = text;
    answer.className = good ? "" : "refused";
    clearTimeout(clearing);
    clearing = setTimeout(() => { answer.textContent = ""; }, good ? 4000 : 15000);
  };
  const members = (form, pressed) => {
    const ask = { ask_id: crypto.randomUUID ? crypto.randomUUID() : `${Date.now()}-${Math.random()}` };
    for (const f of form.elements) {
      if (!f.name || f.name === "token" || f.disabled || (f.type === "radio" && !f.checked) || (f.type === "submit" && f !== pressed)) continue;
      const text = f.value.trim();
      if (text === "") continue;
      ask[f.name] = { number: () => Number(text.replace(",", ".")), list: () => text.split(",").map((t) => t.trim()).filter(Boolean), time: () => new Date(text).toISOString() }[f.dataset.type]?.() ?? text;
    }
    return ask;
  };
  const post = async (ask) => {
    const headers = { "Content-Type": "application/json", "X-Tarecup": "screen" };
    if (body.dataset.token) headers["X-Token"] = body.dataset.token;
    const reply = await fetch("/api/ask", { method: "POST", headers, body: JSON.stringify(ask), signal: AbortSignal.timeout(8000) });
    const said = await reply.json();
    if (!said.ok) throw new Error((said.error && said.error.says) || reply.statusText);
  };
  const refused = (e) => {
    tell(e instanceof TypeError || e.name === "TimeoutError" || e.name === "SyntaxError" ? words.unreachable : e.message, false);
    beep(false);
  };
  const send = async (form) => {
    if (form.dataset.busy) return;
    form.dataset.busy = "1";
    tell(words.sending, true);
    try {
      await post(members(form));
      tell(words.done, true);
      form.reset();
      beep(true);
      const sheet = form.closest("details[open]");
      if (sheet) sheet.open = false;
      if (body.dataset.page === "correct") location.href = document.querySelector("main > .row a.key").href;
    } catch (e) {
      refused(e);
    } finally {
      delete form.dataset.busy;
      home();
    }
  };
  // A scanner does not wait for an answer: the field is free again at once, and codes go one after the other.
  let codes = Promise.resolve();
  const sendCode = (form, pressed) => {
    const ask = members(form, pressed);
    if (form.contains(code)) code.value = "";
    const sheet = form.closest("details[open]");
    if (sheet) sheet.open = false;
    home();
    if (ask.text) codes = codes.then(() => post(ask)).then(() => tell("", true), refused);
  };
  document.addEventListener("submit", (event) => {
    if (!event.target.dataset.ask) return;
    event.preventDefault();
    pad.hidden = true;
    if (event.target.dataset.ask === "code") sendCode(event.target, event.submitter); else send(event.target);
  });

  // ---- the code field is always ready ----
  const sheetOpen = () => document.querySelector("details.sheet[open]");
  const home = () => { if (code && !sheetOpen()) code.focus({ preventScroll: true }); };
  if (code) {
    const ready = byId("code-ready"), text = ready.lastElementChild;
    const showReady = () => {
      const here = document.activeElement === code;
      ready.classList.toggle("away", !here);
      text.textContent = here ? text.dataset.ready : text.dataset.away;
    };
    document.addEventListener("focusin", showReady);
    document.addEventListener("focusout", () => setTimeout(showReady));
    addEventListener("focus", () => home());
    showReady();
    // A scanner that types and a keyboard are heard wherever the focus is, unless a field has it.
    document.addEventListener("keydown", (event) => {
      const at = document.activeElement;
      const typing = at && (at.tagName === "INPUT" || at.tagName === "TEXTAREA");
      if (!typing && event.key.length === 1 && event.key !== " " && !event.ctrlKey && !event.altKey && !event.metaKey && !sheetOpen()) code.focus();
    });
    // Left alone, the page is ready for a scan again.
    let idle;
    const rest = () => { clearTimeout(idle); idle = setTimeout(() => { if (!sheetOpen() && byId("pad").hidden) home(); }, 20000); };
    for (const kind of ["pointerdown", "keydown", "focusin"]) document.addEventListener(kind, rest);
  }
  document.addEventListener("keydown", (event) => {
    if (event.key !== "Escape") return;
    const pad = byId("pad"), sheet = sheetOpen();
    if (!pad.hidden) pad.hidden = true; else if (sheet) { sheet.open = false; sheet.querySelector("summary").focus(); }
    if (!sheet) home();
  });
  document.addEventListener("toggle", (event) => {
    const sheet = event.target;
    if (!sheet.open || !sheet.matches("details.sheet")) return;
    for (const other of document.querySelectorAll("details.sheet[open]")) if (other !== sheet) other.open = false;
  }, true);

  // ---- keys on the screen, offers, and the few local things ----
  const pad = byId("pad"), padShows = byId("pad-shows");
  let target;
  const showPad = () => {
    const label = target.labels && target.labels[0] ? `${target.labels[0].textContent}: ` : "";
    padShows.textContent = label + (target.type === "password" ? "•".repeat(target.value.length) : target.value);
    pad.classList.toggle("numeric", target.inputMode === "numeric" || target.inputMode === "decimal");
  };
  const press = (pressed) => {
    if (pressed === "Close" || !target || !target.isConnected) { pad.hidden = true; return; }
    if (pressed === "Enter") {
      if (target === code) return target.form.requestSubmit();
      // On to the next field that is still empty; recording is a tap of its own.
      const next = [...target.form.elements].find((f) => f !== target && f.required && (f.type === "text" || f.type === "password") && f.value === "");
      if (next) next.focus(); else pad.hidden = true;
      return;
    }
    target.value = pressed === "Back" ? target.value.slice(0, -1) : target.value + (pressed === "Space" ? " " : pressed);
    target.dispatchEvent(new Event("input", { bubbles: true }));
    showPad();
  };
  document.addEventListener("focusin", (event) => {
    if (!pad.hidden && event.target.tagName === "INPUT") { target = event.target; showPad(); }
  });
  document.addEventListener("click", (event) => {
    const hit = event.target.closest("[data-pad-for], [data-key], [data-fill], [data-print]");
    if (!hit) return;
    if (hit.dataset.padFor) { target = byId(hit.dataset.padFor); pad.hidden = !pad.hidden; target.focus(); showPad(); }
    if (hit.dataset.fill) { const into = byId(hit.dataset.into); into.value = hit.dataset.fill; into.dispatchEvent(new Event("input", { bubbles: true })); }
    if ("print" in hit.dataset) print();
    if (hit.dataset.key) press(hit.dataset.key);
  });
  document.addEventListener("input", (event) => {
    if (event.target.dataset.local !== "water") return;
    const form = event.target.form, grams = Number(event.target.value.replace(",", "."));
    const well = grams > 0 && grams < 100000;
    for (const [name, per] of [["water", form.dataset.perGram], ["water-u", form.dataset.perGramU]]) {
      slot(form, name).textContent = well ? number((grams * Number(per)).toFixed(1)) : "–";
    }
  });
  document.addEventListener("change", async (event) => {
    const into = event.target.dataset.readsInto, file = event.target.files && event.target.files[0];
    if (into && file && file.size < 1000000) byId(into).value = await file.text();
  });
  for (const id of [location.hash.slice(1)]) { const d = id && byId(id); if (d && d.matches("details")) d.open = true; }

  showSound();
  dress(document);
  passing();
  listen();
  home();
  // The field is ready, and the page still begins at its top.
  if (!location.hash) scrollTo(0, 0);
})();
