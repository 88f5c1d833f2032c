const byId = (id) => document.getElementById(id);
const target = SETUP.target;
const [BAND_LOW, BAND_HIGH] = SETUP.risk_band_hz;
const inBand = (hz) => hz >= BAND_LOW * 0.99 && hz <= BAND_HIGH * 1.01;
const say = (id, words, state) => { byId(id).textContent = words; byId(id).dataset.state = state; };
const show = { cycle: null, running: false, barPx: 0, meter: new RefreshMeter() };

// -- the display, measured while everything is still
let idle = new RefreshMeter(), since = null;
function watchDisplay(stamp) {
  if (show.running) return;
  if (since === null) since = stamp;
  if (stamp - since > 500) idle.add(stamp); // the page is still being set up before
  if (idle.ready && (idle.n % 30 === 1)) tellDisplay();
  requestAnimationFrame(watchDisplay);
}
function tellDisplay() {
  const now = idle.reading(), verdict = verdictOf(now);
  say("refresh", `${withDeviation(now.hz, now.sigmaHz)} Hz, intervals spread by ${now.spreadMs.toFixed(2)} ms, ${now.dropped} of ${now.refreshes} refreshes missed: ${verdict.words.split(":")[0]}.`,
    verdict.steady ? "good" : verdict.known ? "bad" : "wait");
  drawTrace();
  if (!byId("rates").childElementCount || Math.abs(show.listedHz / now.hz - 1) > 0.002) listRates(now.hz);
  update();
  // A stall of long ago says nothing of now: a measurement that missed some is taken anew every ten seconds.
  if (verdict.known && !verdict.steady && now.seconds > 10) idle = new RefreshMeter();
}
function drawTrace() {
  const canvas = byId("trace"), scale = window.devicePixelRatio || 1;
  const width = canvas.width = canvas.clientWidth * scale, height = canvas.height = canvas.clientHeight * scale;
  const pen = canvas.getContext("2d"), points = idle.recent, period = idle.period;
  const style = getComputedStyle(document.documentElement);
  pen.strokeStyle = style.getPropertyValue("--rule");
  for (const whole of [1, 2]) {
    pen.beginPath();
    pen.moveTo(0, height * (1 - whole / 2.6)); pen.lineTo(width, height * (1 - whole / 2.6)); pen.stroke();
  }
  pen.fillStyle = style.getPropertyValue("--line");
  for (const [stamp, interval] of points) {
    const x = width * (1 - (idle.last - stamp) / 10000), y = height * (1 - Math.min(2.5, interval / period) / 2.6);
    pen.fillRect(x, y - scale, 2 * scale, 2 * scale);
  }
}

// -- rates
function listRates(refreshHz) {
  show.listedHz = refreshHz;
  const kept = show.cycle;
  // Below 20 Hz no calibration looks for a blink.
  const cycles = SETUP.cycles.filter((n, i) => i === 0 || refreshHz / n >= 20);
  byId("rates").replaceChildren(...cycles.map((n) => {
    const hz = refreshHz / n, label = document.createElement("label"), input = document.createElement("input");
    Object.assign(input, { type: "radio", name: "cycle", value: n });
    input.addEventListener("change", () => { show.cycle = n; byId("band-consent").checked = false; update(); });
    label.classList.toggle("risk", inBand(hz));
    const note = document.createElement("small");
    note.textContent = `${n} refreshes a cycle${inBand(hz) ? ", risk band" : ""}`;
    label.append(input, `${hz.toFixed(2)} Hz`, note);
    return label;
  }));
  const safe = cycles.filter((n) => refreshHz / n > BAND_HIGH * 1.01);
  const nearest = safe.sort((a, b) => Math.abs(refreshHz / a - target.blink_hz) - Math.abs(refreshHz / b - target.blink_hz))[0];
  show.cycle = kept ?? nearest ?? null; // in the risk band nothing is chosen by itself
  for (const input of document.getElementsByName("cycle")) input.checked = Number(input.value) === show.cycle;
}

// -- sizes
const fullPx = () => {
  const scale = window.devicePixelRatio || 1;
  return [Math.round(Math.max(screen.width, window.innerWidth) * scale), Math.round(Math.max(screen.height, window.innerHeight) * scale)];
};
const aspect = () => (Array.isArray(target.square_m) ? target.square_m[1] / target.square_m[0] : 1);
const largestSquare = ([width, height]) => Math.floor(Math.min(width / (target.columns + 1), height / aspect() / (target.rows + 1)));
function drawBar() {
  const canvas = byId("bar"), scale = window.devicePixelRatio || 1;
  const room = byId("trace").clientWidth;
  show.barPx = Math.floor(room * scale / 10) * 10;
  canvas.width = show.barPx;
  canvas.height = Math.round(32 * scale);
  canvas.style.width = `${show.barPx / scale}px`;
  const pen = canvas.getContext("2d");
  pen.fillStyle = getComputedStyle(document.documentElement).getPropertyValue("--ink");
  pen.fillRect(0, canvas.height * 0.3, show.barPx, canvas.height * 0.4);
  pen.fillRect(0, 0, 2, canvas.height);
  pen.fillRect(show.barPx - 2, 0, 2, canvas.height);
}
function pitchMm() {
  const length = Number(byId("bar-mm").value);
  return length >= 10 && length <= 3000 ? length / show.barPx : null;
}
function layOut([width, height]) {
  const wished = Math.floor(Number(byId("square-px").value));
  const across = Math.min(wished >= 4 ? wished : Infinity, largestSquare([width, height]));
  const down = Math.round(across * aspect());
  return { width, height, across, down, left: Math.floor((width - across * target.columns) / 2), top: Math.floor((height - down * target.rows) / 2) };
}

// -- the board
function setOf(column, row) {
  if (target.steady_dark.some(([c, r]) => c === column && r === row)) return 0;
  return (column + row) % 2 === 0 ? 1 : target.kind === "counterphase_checker" ? -1 : 0;
}
function drawPhase(canvas, board, sign) {
  const dark = SETUP.levels[byId("level").selectedIndex].dark_dn, scale = window.devicePixelRatio || 1;
  Object.assign(canvas, { width: board.width, height: board.height });
  canvas.style.width = `${board.width / scale}px`;
  canvas.style.height = `${board.height / scale}px`;
  const pen = canvas.getContext("2d", { alpha: false });
  pen.fillStyle = `rgb(${dark},${dark},${dark})`;
  pen.fillRect(0, 0, board.width, board.height);
  pen.fillStyle = "#fff";
  for (let row = 0; row < target.rows; row++)
    for (let column = 0; column < target.columns; column++)
      if (setOf(column, row) === sign)
        pen.fillRect(board.left + column * board.across, board.top + row * board.down, board.across, board.down);
}
function drawBoard() {
  const scale = window.devicePixelRatio || 1;
  const board = layOut([Math.round(window.innerWidth * scale), Math.round(window.innerHeight * scale)]);
  drawPhase(byId("phase-a"), board, 1);
  drawPhase(byId("phase-b"), board, -1);
  byId("phase-a").style.visibility = "hidden"; // still: set A dark
  show.board = board;
  Object.assign(byId("stage").dataset, { left: board.left, top: board.top, squarePx: `${board.across} ${board.down}` });
}

// -- start and stop
function update() {
  const hz = idle.ready && show.cycle ? idle.reading().hz / show.cycle : null;
  const risky = hz !== null && inBand(hz);
  byId("band-row").hidden = !risky;
  if (hz === null) say("rate-note", idle.ready ? "every rate of this display lies in the risk band or below; choose one only if it must be" : "", "attention");
  else if (risky) say("rate-note", `${hz.toFixed(2)} Hz lies in the risk band of ${BAND_LOW} to ${BAND_HIGH} Hz: a faster display is the safer choice`, "bad");
  else if (hz < 60) say("rate-note", `${hz.toFixed(2)} Hz is below 60 Hz and visibly flickers: keep people out of sight of it`, "attention");
  else say("rate-note", `${hz.toFixed(2)} Hz: bright for ${Math.round(show.cycle * target.duty)} of ${show.cycle} refreshes`, "good");
  byId("flash-rate").textContent = hz === null ? "No rate is chosen yet." : `At the rate chosen below it flashes ${hz.toFixed(2)} times a second${risky ? ", within that band" : ""}.`;
  const pitch = pitchMm(), board = layOut(fullPx());
  if (pitch === null) say("size", "not measured yet: without it no target file can be written", "attention");
  else say("size", `a pixel is ${pitch.toFixed(4)} mm: squares of ${board.across} px are ${(board.across * pitch).toFixed(2)} mm`, "good");
  const may = hz !== null && byId("consent").checked && (!risky || byId("band-consent").checked);
  byId("start").disabled = !may;
  byId("start").textContent = hz === null ? "Blink full screen" : `Blink full screen at ${hz.toFixed(2)} Hz`;
  byId("start-note").textContent = may ? "The board stands still for two seconds first. Escape, any key or a click stops." : "Choose a rate and confirm that you have read the cautions.";
}
async function start(event) {
  if (!event.isTrusted || byId("start").disabled || show.running) return; // a person's click, and nothing else
  show.running = true;
  byId("stage").hidden = false;
  try { await document.documentElement.requestFullscreen(); } catch { /* refused: it blinks within the window */ }
  if (!show.running) return;
  show.meter = new RefreshMeter();
  show.begun = null;
  setTimeout(() => { if (show.running) { drawBoard(); requestAnimationFrame(blink); } }, 300); // after the change to full screen
}
function blink(stamp) {
  if (!show.running) return;
  if (show.begun === null) { show.begun = stamp; say("status", "still for two seconds; Escape stops", "wait"); }
  const wait = stamp - show.begun;
  if (wait > 1000) show.meter.add(stamp); // the first second settles the change to full screen
  if (wait > 2000 && show.meter.ready) {
    // Counted in refreshes, missed ones included: a cycle stays true however many are missed.
    const phase = show.meter.index % show.cycle;
    byId("phase-a").style.visibility = phase < Math.round(show.cycle * target.duty) ? "visible" : "hidden";
    if (stamp - (show.told ?? 0) > 1000) {
      show.told = stamp;
      const now = show.meter.reading();
      say("status", `${withDeviation(now.hz / show.cycle, now.sigmaHz / show.cycle)} Hz, ${verdictOf(now).words}; Escape stops`, "wait");
    }
  }
  requestAnimationFrame(blink);
}
function stop() {
  if (!show.running) return;
  show.running = false;
  byId("stage").hidden = true;
  if (document.fullscreenElement) document.exitFullscreen().catch(() => {});
  byId("consent").checked = byId("band-consent").checked = false; // each start is asked for anew
  idle = new RefreshMeter();
  since = null;
  requestAnimationFrame(watchDisplay);
  tellResult();
  update();
}

// -- what was shown
function targetFile(now) {
  const pitch = pitchMm();
  if (pitch === null || !verdictOf(now).steady) return null;
  const across = Number((show.board.across * pitch * 1e-3).toPrecision(8)), down = Number((show.board.down * pitch * 1e-3).toPrecision(8));
  return { ...target, square_m: across === down ? across : [across, down], blink_hz: now.hz / show.cycle, levels: null,
    scanout_s: 1 / now.hz, scan_direction: "down",
    measured: { refresh_hz: now.hz, refresh_sigma_hz: now.sigmaHz, interval_spread_s: now.spreadMs * 1e-3, refreshes: now.refreshes,
                dropped: now.dropped, refreshes_a_cycle: show.cycle, square_px: [show.board.across, show.board.down],
                bar_px: show.barPx, bar_mm: Number(byId("bar-mm").value), log_step: SETUP.levels[byId("level").selectedIndex].log_step } };
}
function tellResult() {
  byId("result").hidden = false;
  const measured = show.meter.ready ? show.meter.reading() : null;
  const file = measured && show.board ? targetFile(measured) : null;
  byId("file-row").hidden = byId("json").hidden = file === null;
  if (!measured) { say("verdict", "stopped before the rate was measured", "attention"); byId("numbers").replaceChildren(); return; }
  const verdict = verdictOf(measured);
  const why = !verdict.steady ? " No target file is written from it." : file === null ? " Measure the bar, then run it again, for a target file." : "";
  say("verdict", `It was ${verdict.words}.${why}`, verdict.steady ? "good" : "bad");
  const facts = [["true blink rate", `${withDeviation(measured.hz / show.cycle, measured.sigmaHz / show.cycle)} Hz`],
    ["refresh", `${withDeviation(measured.hz, measured.sigmaHz)} Hz`], ["spread of intervals", `${measured.spreadMs.toFixed(3)} ms`],
    ["missed", `${measured.dropped} of ${measured.refreshes}`], ["shown for", `${measured.seconds.toFixed(1)} s`],
    ["square", show.board ? `${show.board.across} x ${show.board.down} px` : ""]];
  byId("numbers").replaceChildren(...facts.map(([name, value]) => {
    const cell = document.createElement("div"), dt = document.createElement("dt"), dd = document.createElement("dd");
    dt.textContent = name; dd.textContent = value; cell.append(dt, dd);
    return cell;
  }));
  if (file === null) return;
  const text = JSON.stringify(file, null, 1) + "\n";
  byId("json").textContent = text;
  byId("file").href = URL.createObjectURL(new Blob([text], { type: "application/json" }));
}

byId("level").replaceChildren(...SETUP.levels.map(({ log_step }) => new Option(`by ${log_step.toFixed(2)} log units (1 : ${Math.exp(log_step).toFixed(1)})`)));
byId("square-px").value = largestSquare(fullPx());
byId("square-px").max = largestSquare(fullPx());
for (const id of ["bar-mm", "square-px", "level", "consent", "band-consent"]) byId(id).addEventListener("input", update);
byId("start").addEventListener("click", start);
window.addEventListener("keydown", () => stop());
byId("stage").addEventListener("pointerdown", stop);
document.addEventListener("fullscreenchange", () => { if (!document.fullscreenElement) stop(); });
document.addEventListener("visibilitychange", () => { if (document.hidden) stop(); });
window.addEventListener("resize", () => { drawBar(); update(); });
drawBar();
update();
requestAnimationFrame(watchDisplay);
