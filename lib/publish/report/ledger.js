// What became of each contract, and what could be traded.

let ledgerTable, ledgerShown;
const ledgerWanted = {
  reason: null,
  expiry: null,
  text: ''
};
function ledgerRows() {
  return page.quotes.filter(
      (q) => (ledgerWanted.reason === null || q.reason === ledgerWanted.reason) &&
          (ledgerWanted.expiry === null || q.expiry === ledgerWanted.expiry) &&
          (ledgerWanted.text === '' ||
           (contractName(q) + ' ' + reasonWord(q.reason) + ' ' +
            (q.note >= 0 ? page.notes[q.note] : ''))
               .toLowerCase()
               .includes(ledgerWanted.text)));
}
function updateLedger() {
  const rows = ledgerRows();
  ledgerTable.node.style.setProperty('--lines', Math.max(3, Math.min(14, rows.length)));
  ledgerTable.show(rows);
  ledgerShown.textContent = rows.length === page.quotes.length ?
      'all ' + count(rows.length) :
      count(rows.length) + ' of ' + count(page.quotes.length);
  document.querySelectorAll('#ledger [data-reason]')
      .forEach(
          (b) => b.setAttribute(
              'aria-pressed',
              ledgerWanted.reason !== null &&
                  reasonWord(ledgerWanted.reason) === b.dataset.reason));
}
function showReason(reason) {
  ledgerWanted.reason = ledgerWanted.reason === reason ? null : reason;
  updateLedger();
}

const ledgerOrder = (q) => q.state === 'dropped' ? (reasonWord(q.reason) === 'no-bid' ? 1 : 0) :
    q.state === 'used'                           ? 2 :
                                                   3;
function ledgerSection() {
  const flat = page.quotes.length ?
      [...d3.rollup(page.quotes, (v) => v.length, (q) => q.reason)].flat() :
      [];
  page.quotes.sort((a, b) => ledgerOrder(a) - ledgerOrder(b));
  const unit = (q, x) => q.inVol ? vol(x) : price(x);
  const columns = [
    {
      head: 'line',
      width: '3.8rem',
      number: true,
      narrow: 'stays',
      sort: (q) => q.line,
      cell: (q) => String(q.line)
    },
    {head: 'contract', width: '6.6rem', sort: (q) => q.strike, cell: (q) => contractName(q)},
    {
      head: 'expiry',
      width: page.expiries.some((e) => e.label.length > 10) ? '8.6rem' : '6.6rem',
      sort: (q) => q.expiry ? q.expiry.t : null,
      cell: (q) => q.expiry ? el('button', {
        type: 'button',
        class: 'go',
        tabindex: '-1',
        onclick: () => {
          choose(q.expiry);
          goTo('smile');
        }
      },
                                 q.expiry.label) :
                              ''
    },
    {head: 'state', width: '4.2rem', sort: (q) => q.state, cell: (q) => q.state},
    {
      head: 'reason',
      width: '7rem',
      sort: (q) => reasonWord(q.reason),
      cell: (q) => q.reason ? el('span', {title: REASONS[q.reason][2]}, reasonWord(q.reason)) : ''
    },
    {head: 'bid', width: '4.3rem', number: true, sort: (q) => q.bid, cell: (q) => unit(q, q.bid)},
    {head: 'ask', width: '4.3rem', number: true, sort: (q) => q.ask, cell: (q) => unit(q, q.ask)},
    {
      head: 'vol bid',
      width: '4.3rem',
      number: true,
      sort: (q) => q.volBid,
      cell: (q) => vol(q.volBid)
    },
    {
      head: 'vol ask',
      width: '4.3rem',
      number: true,
      sort: (q) => q.volAsk,
      cell: (q) => vol(q.volAsk)
    },
    {
      head: 'fitted',
      width: '4.3rem',
      number: true,
      sort: (q) => q.volFit,
      cell: (q) => vol(q.volFit)
    },
    {
      head: 'miss',
      width: '3.6rem',
      number: true,
      down: true,
      sort: (q) => isNumber(q.miss) ? Math.abs(q.miss) : null,
      cell: (q) => isNumber(q.miss) ? signed(q.miss, 2) : ''
    },
    {
      head: 'note',
      width: 'minmax(9rem, 2fr)',
      sort: (q) => q.note < 0 ? '' : page.notes[q.note],
      cell: (q) => q.note < 0 ? '' : foreign(page.notes[q.note])
    },
    {
      head: 'file',
      width: 'minmax(6rem, 1fr)',
      sort: (q) => page.files[q.file],
      cell: (q) => el('span', {title: page.files[q.file]}, foreign(fileName(q)))
    },
  ];
  const noted = page.quotes.some((q) => q.note >= 0);
  ledgerTable = new LongTable({
    id: 'q',
    label: 'Contracts read',
    columns: columns.filter((c) => noted || c.head !== 'note'),
    rows: page.quotes,
    empty: 'No contract is like that.'
  });
  const search = el('input', {
    type: 'search',
    placeholder: 'strike, reason or note',
    'aria-label': 'Find a contract',
    oninput: () => {
      ledgerWanted.text = search.value.trim().toLowerCase();
      updateLedger();
    }
  });
  ledgerShown = el('output', {class: 'shown'});
  const by = tally(flat);
  const node = section(
      'ledger', counted(by.read, 'contract') + ' read',
      count(by.used) + ' used, ' + count(by.spare) + ' spare, ' + count(by.dropped) +
          ' dropped. A reason lists its contracts; vols in % a year, miss in half-spreads outside bid and ask.',
      el('div', {class: 'two'}, reasonBars(by, showReason), meanings(by)),
      el('div', {class: 'filters'}, search, toggle('this expiry only', false, (on) => {
           ledgerWanted.expiry = on ? chosen.expiry : null;
           updateLedger();
         }), ledgerShown), ledgerTable.node);
  updateLedger();
  onChoose(() => {
    if (ledgerWanted.expiry) {
      ledgerWanted.expiry = chosen.expiry;
      updateLedger();
    }
  });
  return node;
}
function meanings(by) {
  const list = [...by.reasons.keys()].filter((r) => r > 0).sort((a, b) => a - b);
  return plainTable(['reason', 'what it means'], list.map((r) => [reasonWord(r), REASONS[r][2]]));
}

// ---- Arbitrage ---------------------------------------------------------------------------------

// So many rows are seen at first; on paper all are.
const FEW_ARBITRAGES = 10;
function violationSection() {
  if (!page.violations.length)
    return section('arbitrage', 'Arbitrage', 'None was found, among the quotes or in the surface.');
  const rows = page.violations.map((v) => {
    const expiry = page.expiries[v.expiry], second = page.expiries[v.expiry2];
    return [
      el('span', {'data-violation': v.place}, String(v.place + 1)), v.scope, v.kind,
      expiry ? el('button', {
        type: 'button',
        class: 'go',
        onclick: () => {
          choose(expiry, v);
          goTo('smile');
        }
      },
                  expiry.label) :
               v.at.slice(0, 10),
      second ? second.label : '', v.strikes.map(price).join(', '), price(v.amount),
      fixed(v.points, 2), fixed(v.halfSpreads, 2), el('span', {class: 'legs'}, v.text)
    ];
  });
  const all = rows.length, few = all > FEW_ARBITRAGES + 2;
  const table = plainTable(
      [
        '>no.', 'among', 'kind', 'expiry', 'with', 'strikes', '>locked in', '>vol points',
        '>half-spreads', 'legs: + buys at the ask, \u2212 sells at the bid'
      ],
      rows);
  table.classList.add('entire');
  const shown = el('output', {});
  const more = el('button', {type: 'button', class: 'twin', onclick: () => show(!more.all)});
  const show = (everything) => {
    more.all = everything;
    table.classList.toggle('few', !everything);
    shown.textContent = (everything ? 'all ' : FEW_ARBITRAGES + ' of ') + count(all) + ' shown';
    more.textContent = everything ? 'show the first ' + FEW_ARBITRAGES : 'show all ' + count(all);
  };
  if (few) show(false);
  onChoose(() => {
    if (few && chosen.violation && chosen.violation.place >= FEW_ARBITRAGES) show(true);
    table.querySelectorAll('tbody tr')
        .forEach((row, i) => row.classList.toggle('lit', page.violations[i] === chosen.violation));
  });
  return section(
      'arbitrage', counted(all, 'arbitrage'),
      'What contradicts what, as trades. The expiry shows the legs in its smile, framed. Locked in: present value per unit of the legs, quote currency.',
      few ? el('div', {class: 'of-all'}, shown, more) : null, table);
}
