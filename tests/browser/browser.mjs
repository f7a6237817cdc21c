// One headless Chromium, spoken to over the DevTools protocol.

import { spawn } from "node:child_process";
import { mkdtempSync, readFileSync, rmSync } from "node:fs";
import { createRequire } from "node:module";
import { tmpdir } from "node:os";
import { join } from "node:path";
import { pathToFileURL } from "node:url";

const { WebSocket } = createRequire(import.meta.url)("ws");
const FLAGS = [
  "--headless", "--no-sandbox", "--disable-gpu", "--disable-quic", "--no-first-run", "--disable-sync",
  "--disable-background-networking", "--disable-component-update", "--hide-scrollbars", "--remote-debugging-port=0",
];
const PATIENCE_MS = 60_000;

const late = (what) => new Promise((_, fail) => setTimeout(() => fail(new Error(`${what}: no answer in ${PATIENCE_MS / 1000} s`)), PATIENCE_MS).unref());

/** Starts a browser; `close` ends it. */
export async function start() {
  const profile = mkdtempSync(join(tmpdir(), "thornmap-browser-"));
  const names = process.env.CHROMIUM ? [process.env.CHROMIUM] : ["chromium", "chromium-browser"];
  for (const name of names) {
    const child = spawn(name, [...FLAGS, `--user-data-dir=${profile}`, "about:blank"], { stdio: ["ignore", "ignore", "pipe"] });
    const address = await Promise.race([
      new Promise((found) => {
        let said = "";
        child.on("error", () => found(null));
        child.on("exit", () => found(null));
        child.stderr.on("data", (part) => {
          said += part;
          const match = /DevTools listening on (ws:\S+)/.exec(said);
          if (match) found(match[1]);
        });
      }),
      late(name),
    ]);
    if (!address) continue;
    const socket = new WebSocket(address, { maxPayload: 1 << 28 });
    await new Promise((ready, fail) => socket.once("open", ready).once("error", fail));
    const waiting = new Map();
    const listeners = new Set();
    let number = 0;
    socket.on("message", (text) => {
      const message = JSON.parse(text);
      if (message.id) {
        const { answer, fail } = waiting.get(message.id);
        waiting.delete(message.id);
        if (message.error) fail(new Error(message.error.message));
        else answer(message.result);
      } else for (const listen of listeners) listen(message);
    });
    const send = (method, params = {}, sessionId) => {
      number += 1;
      const asked = new Promise((answer, fail) => waiting.set(number, { answer, fail }));
      socket.send(JSON.stringify({ id: number, method, params, sessionId }));
      return Promise.race([asked, late(method)]);
    };
    const close = async () => {
      const gone = new Promise((done) => child.once("exit", done));
      socket.close();
      child.kill();
      await Promise.race([gone, late("the end of the browser")]);
      rmSync(profile, { recursive: true, force: true, maxRetries: 5, retryDelay: 200 });
    };
    return { send, listeners, close };
  }
  throw new Error(`no Chromium found (tried ${names.join(", ")}); install one or name it in CHROMIUM`);
}

/** Opens a file in a page of its own; everything it complains of or asks for is collected. */
export async function open(browser, file) {
  const { targetId } = await browser.send("Target.createTarget", { url: "about:blank" });
  const { sessionId } = await browser.send("Target.attachToTarget", { targetId, flatten: true });
  const send = (method, params) => browser.send(method, params, sessionId);
  const seen = { complaints: [], requests: [], dialogs: [] };
  let loaded;
  const done = new Promise((ready) => (loaded = ready));
  const url = pathToFileURL(file).href;
  const listen = ({ sessionId: from, method, params }) => {
    if (from !== sessionId) return;
    if (method === "Runtime.consoleAPICalled") seen.complaints.push(`console.${params.type}: ${params.args.map((a) => a.value).join(" ")}`);
    if (method === "Runtime.exceptionThrown") seen.complaints.push(`exception: ${params.exceptionDetails.text} ${params.exceptionDetails.exception?.description ?? ""}`);
    if (method === "Log.entryAdded") seen.complaints.push(`${params.entry.level}: ${params.entry.text}`);
    if (method === "Network.requestWillBeSent" && params.request.url !== url) seen.requests.push(params.request.url);
    if (method === "Page.javascriptDialogOpening") {
      seen.dialogs.push(params.message);
      void send("Page.handleJavaScriptDialog", { accept: false });
    }
    if (method === "Page.loadEventFired") loaded();
  };
  browser.listeners.add(listen);
  for (const domain of ["Runtime", "Log", "Network", "Page"]) await send(`${domain}.enable`);
  await send("Page.navigate", { url });
  await Promise.race([done, late(file)]);
  // Inside a function, so that names of one question do not meet those of the next.
  const ask = async (body) => {
    const { result, exceptionDetails } = await send("Runtime.evaluate", { expression: `(async()=>{${body}})()`, awaitPromise: true, returnByValue: true });
    if (exceptionDetails) throw new Error(exceptionDetails.exception?.description ?? exceptionDetails.text);
    return result.value;
  };
  const size = (width, height = 900) => send("Emulation.setDeviceMetricsOverride", { width, height, deviceScaleFactor: 1, mobile: false });
  const media = (type, scheme) => send("Emulation.setEmulatedMedia", { media: type, features: [{ name: "prefers-color-scheme", value: scheme }] });
  const close = async () => {
    browser.listeners.delete(listen);
    await browser.send("Target.closeTarget", { targetId });
  };
  return { send, ask, size, media, seen, close };
}

/** The source of axe-core. */
export const AXE = readFileSync(createRequire(import.meta.url).resolve("axe-core/axe.min.js"), "utf8");
