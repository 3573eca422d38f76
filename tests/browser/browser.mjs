// A headless Chromium driven over a pair of pipes by the DevTools protocol
// (https://chromedevtools.github.io/devtools-protocol/). Nothing but Node and Chromium is needed.
import {spawn} from 'node:child_process';
import {mkdtempSync, rmSync, writeFileSync} from 'node:fs';
import {tmpdir} from 'node:os';
import {join} from 'node:path';
import {pathToFileURL} from 'node:url';

const kPatience = 60_000;  // ms that one answer may take before the browser is taken for dead

export class Browser {
  static async launch(program = process.env.CHROMIUM || 'chromium') {
    const browser = new Browser();
    browser.profile = mkdtempSync(join(tmpdir(), 'duskgrid-browser-'));
    browser.process = spawn(
        program,
        [
          '--headless=new', '--no-sandbox', '--disable-gpu', '--no-first-run',
          '--disable-dev-shm-usage', '--hide-scrollbars', '--disable-background-networking',
          '--disable-sync', '--disable-component-update', '--no-default-browser-check',
          '--force-color-profile=srgb', '--user-data-dir=' + browser.profile,
          '--remote-debugging-pipe', 'about:blank'
        ],
        {
          stdio: ['ignore', 'ignore', 'ignore', 'pipe', 'pipe'],
          env: {...process.env, HOME: browser.profile}
        });
    browser.listen();
    return browser;
  }
  listen() {
    this.last = 0;
    this.waiting = new Map();
    this.listeners = [];
    let rest = Buffer.alloc(0);
    this.process.stdio[4].on('data', (bytes) => {
      rest = Buffer.concat([rest, bytes]);
      for (let end; (end = rest.indexOf(0)) >= 0; rest = rest.subarray(end + 1)) {
        this.take(JSON.parse(rest.subarray(0, end).toString()));
      }
    });
    this.gone = new Promise((resolve) => this.process.on('exit', resolve));
    this.process.on('error', (error) => {
      throw new Error('Chromium does not start: ' + error.message);
    });
  }
  take(message) {
    if (message.id === undefined) {
      this.listeners.forEach((listener) => listener(message));
      return;
    }
    const {resolve, reject} = this.waiting.get(message.id);
    this.waiting.delete(message.id);
    message.error ? reject(new Error(message.error.message)) : resolve(message.result);
  }
  send(method, params = {}, sessionId = undefined) {
    const id = ++this.last;
    const answer = new Promise((resolve, reject) => {
      const timer = setTimeout(() => reject(new Error(method + ': no answer')), kPatience);
      const settle = (to) => (value) => {
        clearTimeout(timer);
        to(value);
      };
      this.waiting.set(id, {resolve: settle(resolve), reject: settle(reject)});
    });
    this.process.stdio[3].write(JSON.stringify({id, method, params, sessionId}) + '\0');
    return answer;
  }
  async page({width = 1440, height = 900, dark = false} = {}) {
    const {targetId} = await this.send('Target.createTarget', {url: 'about:blank'});
    const {sessionId} = await this.send('Target.attachToTarget', {targetId, flatten: true});
    const page = new Page(this, sessionId, targetId);
    for (const domain of ['Page', 'Runtime', 'Network', 'Log', 'Performance'])
      await page.send(domain + '.enable');
    await page.size(width, height);
    await page.send(
        'Emulation.setEmulatedMedia',
        {features: [{name: 'prefers-color-scheme', value: dark ? 'dark' : 'light'}]});
    return page;
  }
  async close() {
    await this.send('Browser.close').catch(() => {});
    await this.gone;
    rmSync(this.profile, {recursive: true, force: true, maxRetries: 5});
  }
}

export class Page {
  constructor(browser, session, target) {
    Object.assign(this, {browser, session, target, errors: [], requests: []});
    browser.listeners.push((message) => {
      if (message.sessionId === session) this.hear(message);
    });
  }
  hear({method, params}) {
    if (method === 'Runtime.exceptionThrown')
      this.errors.push(
          params.exceptionDetails.exception?.description || params.exceptionDetails.text);
    if (method === 'Runtime.consoleAPICalled' &&
        ['error', 'warning', 'assert'].includes(params.type)) {
      this.errors.push(params.args.map((a) => a.value ?? a.description).join(' '));
    }
    if (method === 'Log.entryAdded' && ['error', 'warning'].includes(params.entry.level))
      this.errors.push(params.entry.text);
    if (method === 'Network.requestWillBeSent') this.requests.push(params.request.url);
    if (method === 'Page.loadEventFired' && this.loaded) this.loaded();
  }
  send(method, params) {
    return this.browser.send(method, params, this.session);
  }
  size(width, height) {
    return this.send(
        'Emulation.setDeviceMetricsOverride',
        {width, height, deviceScaleFactor: 1, mobile: width < 600});
  }
  // Opens a file and waits until its script has run.
  async open(path) {
    const loaded = new Promise((resolve) => {
      this.loaded = resolve;
    });
    await this.send('Page.navigate', {url: path.includes('://') ? path : pathToFileURL(path).href});
    await loaded;
    await this.settle();
  }
  // Two frames: what a script asked for has been drawn.
  settle() {
    return this.ask(
        'new Promise((done) => requestAnimationFrame(() => requestAnimationFrame(() => done(1))))');
  }
  async ask(expression) {
    const {result, exceptionDetails} =
        await this.send('Runtime.evaluate', {expression, awaitPromise: true, returnByValue: true});
    if (exceptionDetails)
      throw new Error(
          expression + ': ' + (exceptionDetails.exception?.description || exceptionDetails.text));
    return result.value;
  }
  async hover(x, y) {
    await this.send('Input.dispatchMouseEvent', {type: 'mouseMoved', x, y});
    await this.settle();
  }
  async click(selector) {
    const at =
        await this.ask(`(() => { const e = document.querySelector(${JSON.stringify(selector)});
      e.scrollIntoView({block: "center", behavior: "instant"}); const b = e.getBoundingClientRect();
      return [b.left + b.width / 2, b.top + b.height / 2]; })()`);
    for (const type of ['mousePressed', 'mouseReleased']) {
      await this.send(
          'Input.dispatchMouseEvent', {type, x: at[0], y: at[1], button: 'left', clickCount: 1});
    }
    await this.settle();
  }
  async key(key, code = key) {
    const numbers = {
      ArrowLeft: 37,
      ArrowUp: 38,
      ArrowRight: 39,
      ArrowDown: 40,
      Enter: 13,
      Home: 36,
      End: 35,
      PageDown: 34,
      Escape: 27,
      Tab: 9
    };
    for (const type of ['keyDown', 'keyUp']) {
      await this.send(
          'Input.dispatchKeyEvent', {type, key, code, windowsVirtualKeyCode: numbers[key] || 0});
    }
    await this.settle();
  }
  async type(text) {
    await this.send('Input.insertText', {text});
    await this.settle();
  }
  // Seconds of script since the page was opened.
  async scriptSeconds() {
    const {metrics} = await this.send('Performance.getMetrics');
    return metrics.find((m) => m.name === 'ScriptDuration').value;
  }
  // The whole page, or the part that a selector names.
  async picture(path, {selector = null, scale = 1, most = 20_000} = {}) {
    const clip = await this.ask(`(() => { const e = ${
        selector ? `document.querySelector(${JSON.stringify(selector)})` :
                   'document.documentElement'};
      const b = e.getBoundingClientRect(); return {x: b.left + scrollX, y: b.top + scrollY, width: b.width, height: Math.min(${
        most}, b.height)}; })()`);
    const {data} = await this.send(
        'Page.captureScreenshot',
        {format: 'png', captureBeyondViewport: true, clip: {...clip, scale}});
    writeFileSync(path, Buffer.from(data, 'base64'));
  }
  close() {
    return this.browser.send('Target.closeTarget', {targetId: this.target});
  }
}
