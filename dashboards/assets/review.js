// The over-read sheet: take decisions with buttons or keys, keep them in this browser, save and load them as a file.
"use strict";

(function overRead() {
  const KIND = "burdenline-decisions", VERSION = 2, READ = [1, 2];
  const CLASSES = ["N", "S", "V", "F", "Q"], KEYS = { a: "accept", n: "N", s: "S", v: "V", f: "F", q: "Q", x: "noise", w: "withdraw" };
  const sheet = document.getElementById("sheet");
  const { recording, fingerprint } = sheet.dataset;
  const shelf = `burdenline-review:${recording}:${fingerprint}`;
  const items = [...sheet.querySelectorAll(".item")];
  const episodes = [...sheet.querySelectorAll(".episode")];
  const marks = [...sheet.querySelectorAll(".mark[data-sample]")];
  const [reader, note] = ["reader", "note"].map((id) => document.getElementById(id));
  const say = (text) => { document.getElementById("review-note").textContent = text; };

  const empty = () => ({ reader_code: "", note: "", families: {}, beats: {}, episodes: {} });
  let state = empty();
  const familyOf = (item) => state.families[item.dataset.family] || {};
  const partsOf = (item) => [...item.querySelectorAll(".part")];
  const decisionOn = (item, part) => (familyOf(item).parts || {})[part.dataset.automatic];
  // What is decided of a family: of a split one whether all parts are, else its own decision or that of the family it looks like.
  function classOf(item) {
    const { decision, same_as, is_mixed } = familyOf(item);
    const parts = partsOf(item);
    if (is_mixed) return parts.length && parts.every((part) => decisionOn(item, part)) ? "parts" : undefined;
    const alike = state.families[same_as];
    const word = decision || (alike && !alike.is_mixed ? alike.decision : undefined);
    return word === "withdraw" ? undefined : word;
  }
  const beatName = (mark) => `${mark.dataset.segment}:${mark.dataset.sample}`;
  const episodeName = (row) => `${row.dataset.kind}:${row.dataset.segment}:${row.dataset.first}`;

  function keep() {
    try { localStorage.setItem(shelf, JSON.stringify(state)); }
    catch { say("This browser keeps nothing between visits: save the decisions as a file before you leave."); }
    show();
  }

  function show() {
    for (const item of items) {
      const { decision, same_as, is_mixed } = familyOf(item);
      item.classList.toggle("decided", Boolean(classOf(item)));
      item.classList.toggle("open", Boolean(is_mixed) && !classOf(item));
      press(item.querySelector(".choices"), is_mixed ? undefined : decision);
      item.querySelector(".open-note").hidden = !is_mixed;
      for (const box of item.querySelectorAll(".parts")) box.hidden = !is_mixed;
      for (const part of partsOf(item)) press(part, decisionOn(item, part));
      item.querySelector("[data-same-as]").value = same_as ?? "";
      item.querySelector("[data-mixed]").checked = Boolean(is_mixed);
    }
    for (const row of episodes) press(row, state.episodes[episodeName(row)]);
    for (const mark of marks) {
      const decision = state.beats[beatName(mark)];
      mark.textContent = { noise: "✕", withdraw: "↶" }[decision] || decision || mark.dataset.automatic;
      mark.classList.toggle("changed", Boolean(decision));
    }
    reader.value = state.reader_code;
    note.value = state.note;
    const decided = items.filter(classOf);
    const left = items.filter((item) => familyOf(item).is_mixed && !classOf(item));
    const share = (some) => some.reduce((sum, item) => sum + Number(item.dataset.share), 0).toFixed(1);
    const single = Object.keys(state.beats).length;
    const told = [`${share(decided)} % of the ventricular beats settled`, `${decided.length} of ${items.length} families decided`];
    if (left.length) told.push(`${left.length} left open with ${share(left)} %`);
    if (single) told.push(`${single} single ${single === 1 ? "beat" : "beats"} relabelled`);
    document.getElementById("progress").textContent = decided.length || single || left.length ? told.join(", ") : "Nothing decided yet";
  }

  function press(place, decision) {
    for (const button of place.querySelectorAll("[data-decision]")) button.setAttribute("aria-pressed", String(button.dataset.decision === decision));
  }

  function decideFamily(item, change) {
    state.families[item.dataset.family] = { ...familyOf(item), ...change };
    keep();
  }

  function decidePart(item, part, decision) {
    const parts = { ...familyOf(item).parts };
    if (decision) parts[part.dataset.automatic] = decision; else delete parts[part.dataset.automatic];
    decideFamily(item, { parts, is_mixed: true });
  }

  function decideBeat(mark, decision) {
    if (decision === "accept" || decision === mark.dataset.automatic) delete state.beats[beatName(mark)];
    else state.beats[beatName(mark)] = decision;
    keep();
  }

  function goTo(item) {
    if (!item) return;
    item.focus({ preventScroll: true });
    item.scrollIntoView({ block: "start" });
  }

  sheet.addEventListener("click", (click) => {
    const button = click.target.closest("[data-decision]");
    if (!button) return;
    const row = button.closest(".episode"), part = button.closest(".part");
    if (part) decidePart(part.closest(".item"), part, button.dataset.decision);
    else if (row) { state.episodes[episodeName(row)] = button.dataset.decision; keep(); }
    else decideFamily(button.closest(".item"), { decision: button.dataset.decision, is_mixed: false });
  });
  sheet.addEventListener("change", (change) => {
    const item = change.target.closest(".item");
    if (change.target.matches("[data-same-as]")) decideFamily(item, { same_as: change.target.value === "" ? null : Number(change.target.value) });
    if (change.target.matches("[data-mixed]")) decideFamily(item, { is_mixed: change.target.checked });
  });
  reader.addEventListener("input", () => { state.reader_code = reader.value; keep(); });
  note.addEventListener("input", () => { state.note = note.value; keep(); });

  document.addEventListener("keydown", (event) => {
    if (event.ctrlKey || event.metaKey || event.altKey || event.target.matches("input, select, textarea")) return;
    const decision = KEYS[event.key];
    if (event.target.matches(".mark[data-sample]")) {
      if (decision) { event.preventDefault(); decideBeat(event.target, decision); }
      if (event.key === "u") decideBeat(event.target, "accept");
      return;
    }
    const here = items.indexOf(event.target.closest(".item"));
    if (event.key === "j") goTo(items[Math.min(here + 1, items.length - 1)]);
    if (event.key === "k") goTo(items[Math.max(here - 1, 0)]);
    if (here < 0) return;
    const item = items[here], part = event.target.closest(".part"), parts = partsOf(item);
    if (event.key === "d") {
      decideFamily(item, { is_mixed: !familyOf(item).is_mixed });
      (familyOf(item).is_mixed && parts.length ? parts[0] : item).focus({ preventScroll: true });
      return;
    }
    if (part && event.key === "u") { decidePart(item, part, undefined); return; }
    if (part && decision && decision !== "withdraw") {
      decidePart(item, part, decision === part.dataset.automatic ? "accept" : decision);
      const next = parts[parts.indexOf(part) + 1];
      if (next) next.focus({ preventScroll: true }); else goTo(items[here + 1]);
      return;
    }
    if (event.key === "u") { delete state.families[item.dataset.family]; keep(); }
    if (decision) {
      decideFamily(item, { decision: decision === item.dataset.automatic ? "accept" : decision, is_mixed: false });
      goTo(items[here + 1]);
    }
  });

  const decidedParts = (item) => partsOf(item).filter((part) => decisionOn(item, part)).map((part) => ({
    automatic: part.dataset.automatic, beat_count: Number(part.dataset.beats), decision: decisionOn(item, part),
  }));

  // The file: lists with everything that applying them needs, described by decisions.schema.json.
  function file() {
    const numbered = (name) => name.split(":").map((part) => (/^-?\d+$/.test(part) ? Number(part) : part));
    const families = items.filter((item) => state.families[item.dataset.family]).map((item) => ({
      family: Number(item.dataset.family), automatic: item.dataset.automatic, beat_count: Number(item.dataset.beats),
      decision: familyOf(item).decision ?? null, same_as: familyOf(item).same_as ?? null, is_mixed: Boolean(familyOf(item).is_mixed),
      parts: familyOf(item).is_mixed ? decidedParts(item) : [],
    }));
    const automatic = Object.fromEntries(marks.map((mark) => [beatName(mark), mark.dataset.automatic]));
    const beats = Object.entries(state.beats).map(([name, decision]) => {
      const [segment, sample] = numbered(name);
      return { segment, sample, automatic: automatic[name], decision };
    });
    const marked = Object.entries(state.episodes).map(([name, decision]) => {
      const [episode_kind, segment, first_sample] = numbered(name);
      return { episode_kind, segment, first_sample, decision };
    });
    return { kind: KIND, version: VERSION, recording_id: recording, fingerprint, reader_code: state.reader_code.trim(), reviewed_utc: new Date().toISOString(), note: state.note, families, beats, episodes: marked };
  }

  document.getElementById("save").addEventListener("click", () => {
    if (!/^[A-Za-z0-9._-]{1,40}$/.test(state.reader_code.trim())) { say("Enter your reader code before saving: letters, digits, dots and dashes, no blank. A decision belongs to a reader."); reader.focus(); return; }
    const content = file();
    if (![content.families, content.beats, content.episodes, content.note].some((each) => each.length)) { say("Nothing is decided yet, so there is nothing to save."); return; }
    const link = document.createElement("a");
    link.href = URL.createObjectURL(new Blob([JSON.stringify(content, null, 1) + "\n"], { type: "application/json" }));
    const safe = (text) => text.replace(/[^A-Za-z0-9_-]+/g, "-").slice(0, 60);
    link.download = `decisions-${safe(recording)}-${safe(content.reader_code)}.json`;
    link.click();
    URL.revokeObjectURL(link.href);
    say(`Saved ${link.download}. Put it into the programme's inbox; the next run applies it.`);
  });

  // What keeps a file from being loaded; nothing is applied in part.
  function objection(content) {
    if (!content || content.kind !== KIND) return "this is not a file of over-read decisions";
    if (!READ.includes(content.version)) return `the file has version ${content.version}, this page reads versions ${READ.join(" and ")}`;
    if (content.recording_id !== recording) return `the decisions belong to recording ${content.recording_id}`;
    if (content.fingerprint !== fingerprint) return "the decisions were taken on another analysis of this recording";
    const lists = ["families", "beats", "episodes"].every((name) => Array.isArray(content[name]));
    const known = [...CLASSES, "accept", "noise", "withdraw", null];
    if (!lists || typeof content.reader_code !== "string" || typeof content.note !== "string") return "the file is not complete";
    if (content.families.some((each) => !items.some((item) => Number(item.dataset.family) === each.family && item.dataset.automatic === each.automatic))) return "it names families that this sheet does not have";
    if (content.families.some((each) => !known.includes(each.decision)) || content.beats.some((each) => !known.includes(each.decision))) return "it holds decisions that do not exist";
    const parts = content.families.flatMap(({ family, parts }) => (parts || []).map((part) => ({ ...part, family })));
    const item = (family) => items.find((each) => Number(each.dataset.family) === family);
    if (parts.some((part) => !partsOf(item(part.family)).some((each) => each.dataset.automatic === part.automatic) || !known.includes(part.decision))) return "it names parts of families that this sheet does not have";
    return "";
  }

  document.getElementById("load").addEventListener("change", async (change) => {
    const [chosen] = change.target.files;
    change.target.value = "";
    if (!chosen) return;
    let content = null;
    try { content = JSON.parse(await chosen.text()); } catch { /* said below */ }
    const problem = objection(content);
    if (problem) { say(`Not loaded: ${problem}. Nothing was changed.`); return; }
    state = {
      reader_code: content.reader_code, note: content.note,
      families: Object.fromEntries(content.families.map(({ family, decision, same_as, is_mixed, parts }) => [family, {
        decision: decision ?? undefined, same_as, is_mixed, parts: Object.fromEntries((parts || []).map((part) => [part.automatic, part.decision])),
      }])),
      beats: Object.fromEntries(content.beats.map((each) => [`${each.segment}:${each.sample}`, each.decision])),
      episodes: Object.fromEntries(content.episodes.map((each) => [`${each.episode_kind}:${each.segment}:${each.first_sample}`, each.decision])),
    };
    keep();
    say("Loaded.");
  });

  document.getElementById("clear").addEventListener("click", () => { state = empty(); keep(); say("All decisions on this sheet were cleared."); });

  try {
    const kept = JSON.parse(localStorage.getItem(shelf));
    if (kept) state = { ...empty(), ...kept };
    const others = Object.keys(localStorage).filter((name) => name.startsWith(`burdenline-review:${recording}:`) && name !== shelf);
    if (others.length) say("This browser also holds decisions on an earlier analysis of this recording. They are not shown here.");
  } catch { /* nothing kept, or unreadable: begin with an empty sheet */ }
  show();
})();
