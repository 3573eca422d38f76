// node pictures.mjs REPORT FOLDER: takes the pictures of the tour.
import {join} from 'node:path';

import {Browser} from '../../tests/browser/browser.mjs';

const [, , report, folder] = process.argv;
const browser = await Browser.launch();

// file, page, part of it, width, dark, and what to do first.
const kPictures = [
  [
    'night', 'index.html', 'body', 1180, false,
    'document.querySelector(\'#inputs\').remove(); document.querySelector(\'#sign-off\').remove()'
  ],
  ['short', 'DRYDOK.html', '#short', 1180, false],
  [
    'smile', 'DRYDOK.html', '#smile', 1180, false,
    'document.querySelector(\'#arbitrage tbody tr:nth-child(2) button\').click()'
  ],
  ['forward', 'DRYDOK.html', '#forward-figure', 1180, false],
  ['arbitrage', 'MARSHG.html', '#arbitrage', 1180, false],
  ['surface', 'QNOR.html', '#surface-figure', 1180, false],
  ['variance', 'QNOR.html', '#variance-figure', 1180, false],
  ['ledger', 'KELPWK.html', '#ledger', 1180, false],
  ['given', 'EELRUN.html', '#facts', 1180, false],
  ['narrow', 'DRYDOK.html', 'body', 390, true, '', 1500],
];
for (const [name, file, part, width, dark, first, most] of kPictures) {
  const page = await browser.page({width, dark, height: 6500});
  await page.open(join(report, file));
  if (first) await page.ask(first);
  await page.settle();
  await page.settle();
  await page.picture(join(folder, name + '.png'), {selector: part, most: most || 20_000});
  await page.close();
}
await browser.close();
