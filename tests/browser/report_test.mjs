// node report_test.mjs MAKE_REPORT DUSKGRID DEMO_NIGHT: the report of a night as a person meets it,
// from disk, in a real browser. Says what failed and exits with 1; times are printed, not judged.
import {execFileSync, spawnSync} from 'node:child_process';
import {mkdtempSync, readdirSync, rmSync} from 'node:fs';
import {tmpdir} from 'node:os';
import {join} from 'node:path';
import {pathToFileURL} from 'node:url';

import {Browser} from './browser.mjs';

const [, , makeReport, duskgrid, demoNight] = process.argv;
const scratch = mkdtempSync(join(tmpdir(), 'duskgrid-report-'));
const invented = join(scratch, 'invented'), demo = join(scratch, 'out', '2031-03-14', 'report');
const [carriedDate, changedDate, outlierStrike] =
    execFileSync(makeReport, [invented]).toString().trim().split(' ');
spawnSync(
    duskgrid, ['build', join(demoNight, 'night.toml'), '--out', join(scratch, 'out'), '--quiet']);
const planted = 'MOOR%3Cscript%3Ealert%281%29%3C%2Fscript%3E.html';

const failures = [];
function check(what, holds, seen = '') {
  if (!holds) failures.push(what + (seen === '' ? '' : '; seen: ' + JSON.stringify(seen)));
}
const browser = await Browser.launch();
// Opens a page, runs `visit`, and asks of every page: no error, nothing fetched but its own files.
async function on(path, options, visit) {
  const page = await browser.page(options);
  await page.open(path);
  check(path + ' is ready', await page.ask('document.documentElement.dataset.ready') === 'yes');
  if (visit) await visit(page);
  await page.settle();
  check(path + ' has no error', page.errors.length === 0, page.errors);
  const folder = pathToFileURL(join(path, '..')).href + '/';
  const foreign = page.requests.filter((url) => !url.startsWith(folder));
  check(path + ' asks for nothing outside its folder', foreign.length === 0, foreign);
  const wide = await page.ask('document.documentElement.scrollWidth - innerWidth');
  check(path + ' is not wider than the window', wide <= 0, wide);
  await page.close();
}
const texts = (selector) =>
    `[...document.querySelectorAll(${JSON.stringify(selector)})].map((e) => e.textContent)`;
const rowNames = texts('.space .line bdi:first-of-type');

await on(join(invented, 'index.html'), {}, async (page) => {
  console.log(
      'index of 6,000 underlyings: ' + (await page.scriptSeconds()).toFixed(2) + ' s of script');
  check('all are shown', (await page.ask(texts('.shown')))[0] === 'all 6,000');
  check(
      'few rows are drawn',
      await page.ask('document.querySelectorAll(\'.space .line\').length') < 60);
  await page.ask('document.querySelector(\'#search\').focus()');
  await page.type('<script>');
  check(
      'a name like markup is found and is text',
      JSON.stringify(await page.ask(rowNames)) === '["<script>alert(1)</script>"]',
      await page.ask(rowNames));
  await page.ask('document.querySelector(\'#search\').select()');
  await page.type('=1+1');
  check(
      'a name like a formula is text', JSON.stringify(await page.ask(rowNames)) === '["=1+1"]',
      await page.ask(rowNames));
  await page.ask(
      'document.querySelector(\'#search\').value = \'\'; document.querySelector(\'#search\').dispatchEvent(new Event(\'input\'))');
  check(
      'nothing was run or built from names',
      await page.ask('document.querySelectorAll(\'main b, main script\').length') === 0);

  await page.click('[data-status=\'1\']');
  const flagged =
      await page.ask('document.querySelector(\'[data-status="1"] strong\').textContent');
  check(
      'a status tile filters', (await page.ask(texts('.shown')))[0] === flagged + ' of 6,000',
      flagged);
  check(
      'and shows only that status',
      (await page.ask(texts('.space .line > div:nth-child(2)'))).every((t) => t === 'flagged'));
  await page.click('[data-status=\'1\']');
  await page.click('[data-reason=\'outlier\']');
  check('a reason filters', (await page.ask(texts('.shown')))[0] === flagged + ' of 6,000');
  await page.click('[data-reason=\'outlier\']');

  await page.click('.head div:nth-child(9) button');
  const sorted =
      (await page.ask(texts('.space .line > div:nth-child(9)'))).slice(0, 20).map(Number);
  check(
      'a column sorts downwards',
      sorted[0] > 0 && sorted.every((n, i) => i === 0 || n <= sorted[i - 1]), sorted);
  check(
      'and says so',
      await page.ask(
          'document.querySelector(\'.head div:nth-child(9)\').getAttribute(\'aria-sort\')') ===
          'descending');

  await page.ask('document.querySelector(\'.long\').focus()');
  await page.key('End');
  check(
      'End walks to the last row',
      await page.ask(
          'document.querySelector(\'.line.current\').getAttribute(\'aria-rowindex\')') === '6001');
  await page.key('Home');
  check(
      'Home to the first',
      await page.ask(
          'document.querySelector(\'.line.current\').getAttribute(\'aria-rowindex\')') === '2');
  console.log(
      'after filtering and sorting: ' + (await page.scriptSeconds()).toFixed(2) + ' s of script');
});

await on(join(invented, 'LARGE.html'), {}, async (page) => {
  console.log(
      'underlying of 40 expiries and 8,000 quotes: ' + (await page.scriptSeconds()).toFixed(2) +
      ' s of script');
  await page.size(1440, 8000);
  await page.settle();
  console.log(
      'with every picture drawn: ' + (await page.scriptSeconds()).toFixed(2) + ' s of script');
  check(
      'every expiry has a slip',
      await page.ask('document.querySelectorAll(\'.slip\').length') === 40);
});

const short = texts('.look li');
await on(join(invented, planted), {height: 7000}, async (page) => {
  check(
      'the name is text',
      await page.ask('document.querySelector(\'h1\').textContent') ===
          'MOOR<script>alert(1)</script>');
  const looks = await page.ask(short);
  const says = (...words) => looks.some((text) => words.every((word) => text.includes(word)));
  check(
      'says which expiry was carried and its age', says(carriedDate, 'carried', '3 days old'),
      looks);
  check('says what changed', says(changedDate, 'node to sign off', 'beyond the tolerance'), looks);
  check('says which quote was dropped and why', says('outlier', 'put ' + outlierStrike), looks);
  check('says that there is an arbitrage', says('Arbitrage', '1 vertical'), looks);

  // The arbitrage leads to the smile, with its legs framed.
  await page.click('#arbitrage td button');
  check(
      'an arbitrage shows its expiry',
      await page.ask('document.querySelectorAll(\'#smile-figure .lit\').length') === 2);
  check(
      'the dropped quote bears its reason',
      (await page.ask(texts('#smile-figure .why'))).includes('outlier'));

  // Every picture is read by pointer and by keys, and has a twin.
  const ids = await page.ask('[...document.querySelectorAll(\'figure\')].map((f) => f.id)');
  check('there are eight pictures', ids.length === 8, ids);
  for (const id of ids) {
    const focus = `document.querySelector('#${id} .plot').focus()`,
          readout = `document.querySelector('#${id} .readout')`;
    await page.ask(focus);
    await page.key('Home');
    const first = await page.ask(readout + '.textContent');
    await page.key('ArrowRight');
    const second = await page.ask(readout + '.textContent');
    check(
        id + ' is read by keys', first !== '' && second !== '' && first !== second,
        [first, second]);
    check(id + ' is said aloud', (await page.ask(texts('.unseen')))[0].length > 5);
    const at = await page.ask(`(() => { const b = document.querySelector('#${
        id} .cursor').getBoundingClientRect(); return [b.left + b.width / 2, b.top + b.height / 2]; })()`);
    await page.key('Escape');
    check(id + ' is left with Escape', await page.ask(readout + '.hidden'));
    await page.hover(at[0], at[1]);
    check(id + ' is read by pointer', !(await page.ask(readout + '.hidden')));
    await page.click(`#${id} .twin`);
    check(
        id + ' has a table twin',
        await page.ask(`document.querySelectorAll('#${id} .as-table td').length`) > 4);
    await page.click(`#${id} .twin`);
    check(id + ' turns back', !(await page.ask(`document.querySelector('#${id} .plot').hidden`)));
    check(id + ' has units', (await page.ask(texts(`#${id} .unit`))).length > 0);
  }

  await page.ask('document.querySelector(\'.slip\').focus()');
  await page.key('ArrowRight');
  check(
      'arrow keys walk the expiries',
      await page.ask('document.querySelectorAll(\'.slip[aria-selected=true]\').length') === 1);
  await page.click('#ledger [data-reason=\'outlier\']');
  check(
      'a reason lists its contracts',
      (await page.ask(texts('#ledger .shown')))[0].startsWith('1 of '));
  check(
      'extrapolated parts are hatched',
      await page.ask('document.querySelectorAll(\'#surface-figure .hatch-over\').length') > 0);
  check(
      'the change is framed',
      await page.ask('document.querySelectorAll(\'#changes-figure .ring\').length') === 1);
  const shade = 'getComputedStyle(document.body).backgroundColor', before = await page.ask(shade);
  await page.click('input[name=theme][value=dark]');
  check('the switch turns it dark', before !== await page.ask(shade));
  await page.click('input[name=theme][value=auto]');
});

// The demo night, in all forms.
for (const file of readdirSync(demo).filter((name) => name.endsWith('.html'))) {
  for (const [width, dark] of [[1440, false], [390, true]])
    await on(join(demo, file), {width, dark, height: 6000});
}
// Its many arbitrages: ten at first, all when asked for.
await on(join(demo, 'DRYDOK.html'), {height: 6000}, async (page) => {
  const seen =
      '[...document.querySelectorAll(\'#arbitrage tbody tr\')].filter((r) => r.offsetHeight > 0).length';
  const all = await page.ask('document.querySelectorAll(\'#arbitrage tbody tr\').length');
  check('ten arbitrages are shown', all > 12 && await page.ask(seen) === 10, all);
  check(
      'and it says of how many',
      (await page.ask(texts('#arbitrage output')))[0] === '10 of ' + all + ' shown');
  await page.click('#arbitrage .of-all button');
  check('all are when asked for', await page.ask(seen) === all);
});
for (const file of readdirSync(demo).filter((name) => name.endsWith('.html')))
  await on(join(demo, file), {height: 6000}, async (page) => {
    const meetings = await page.ask(`(() => {
      const boxes = [...document.querySelectorAll('#smile-figure .why')].map(
          (e) => e.getBoundingClientRect());
      const meet = (a, b) => a.left < b.right && b.left < a.right &&
          a.top + 3 < b.bottom - 3 && b.top + 3 < a.bottom - 3;
      return boxes.filter((a, i) => boxes.some((b, j) => j > i && meet(a, b))).length;
    })()`);
    check('labels of ' + file + ' meet no other', meetings === 0, meetings);
  });
await on(join(demo, 'index.html'), {}, async (page) => {
  const links = await page.ask(
      '[...document.querySelectorAll(\'.space a\')].map((a) => a.getAttribute(\'href\'))');
  check('twelve underlyings have links', links.length === 12, links);
  await page.ask('document.querySelector(\'.long\').focus()');
  await page.key('ArrowDown');
  const loaded = new Promise((resolve) => {
    page.loaded = resolve;
  });
  await page.key('Enter').catch(() => {});
  await loaded;
  check(
      'Enter opens the page of the worst',
      await page.ask('document.querySelector(\'h1\').textContent') === 'FOGHRN');
});

await browser.close();
rmSync(scratch, {recursive: true, force: true});
for (const failure of failures) console.error('FAILED: ' + failure);
console.log(
    failures.length === 0 ? 'the report holds in the browser' : failures.length + ' failed');
process.exit(failures.length === 0 ? 0 : 1);
