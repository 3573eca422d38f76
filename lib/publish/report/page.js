// The page of one underlying, put together.

function verdict() {
  const dropped = page.quotes.filter((q) => q.state === 'dropped'),
        loud = dropped.filter((q) => reasonWord(q.reason) !== 'no-bid');
  const entry = (term, value, small) =>
      el('div', {}, el('dt', {}, term), el('dd', {}, value, small ? el('small', {}, small) : null));
  const figures =
      el('dl', {class: 'figures'},
         entry('expiries', page.fitted.length + ' of ' + page.expiries.length, 'marked'),
         entry(
             'used', count(page.used),
             page.used ? share(page.inside, page.used) + ' met inside' : null),
         entry(
             'dropped', count(dropped.length),
             dropped.length ? count(dropped.length - loud.length) + ' had no bid' : null),
         entry(
             'arbitrage', count(page.violations.length),
             page.fitted.length ?
                 (page.certified ? 'surface proved free' : 'surface not proved free') :
                 null),
         entry(
             'spot', isNumber(page.spot) ? price(page.spot) : 'none',
             isNumber(page.spot) ? 'quote currency' : null));
  return section(
      'short', 'In short', null,
      el('div', {class: 'lead'}, figures, el('ul', {class: 'look'}, looks(loud))));
}

// What a person should look at, each with where to find it.
function looks(loud) {
  const list = [];
  const look = (text, go, fine) => list.push(
      el('li', {},
         el('span', {class: 'sign' + (fine ? ' fine' : ''), 'aria-hidden': 'true'},
            fine ? '\u2713' : '\u25b6'),
         go ? el('button', {type: 'button', onclick: go}, text) : el('span', {}, text)));
  if (page.message) look(page.message);
  if (page.status === 2)
    look('The whole surface is carried from ' + page.carried_from.slice(0, 10) + '.');
  for (const e of page.carriedExpiries) {
    look(
        'Expiry ' + e.label + ' is carried' +
            (e.carried ? ' from ' + e.carried.from.slice(0, 10) + ', ' + fixed(e.carried.days, 0) +
                     (Math.round(e.carried.days) === 1 ? ' day old' : ' days old') :
                         '') +
            '.',
        () => {
          choose(e);
          goTo('smile');
        });
  }
  if (flaggedMoves.length) {
    const c = flaggedMoves.slice().sort(largerMove)[0];
    look(
        counted(flaggedMoves.length, 'node') +
            ' to sign off since the night before, the largest move ' + points(c.move) +
            ' vol points at ' + (c.tenor || c.date) + ', strike ' + price(c.strike) + ', ' +
            mainPart(c) + ', ' + WHYS[c.why] + '.',
        () => goTo('changes'));
  }
  const kinds = d3.rollup(page.violations, (v) => v.length, (v) => v.kind);
  if (page.violations.length)
    look(
        'Arbitrage: ' + [...kinds].map(([kind, n]) => n + ' ' + kind).join(', ') +
            '; the largest locks in ' + price(d3.max(page.violations, (v) => v.amount)) + '.',
        () => goTo('arbitrage'));
  const broken = page.expiries.filter((e) => e.forward && e.forward.breaks > 0);
  if (broken.length)
    look(
        'Pairs near the money exclude the forward at ' + broken.map((e) => e.label).join(', ') +
            '.',
        () => {
          choose(broken[0]);
          goTo('forwards');
        });
  const missed =
      page.quotes.filter((q) => q.miss).sort((a, b) => Math.abs(b.miss) - Math.abs(a.miss));
  if (missed.length)
    look(
        counted(missed.length, 'used quote') + ' outside bid and ask, the worst ' +
            contractName(missed[0]) + ' at ' + missed[0].expiry.label + ' by ' +
            fixed(Math.abs(missed[0].miss), 1) + ' half-spreads.',
        () => {
          choose(missed[0].expiry);
          goTo('smile');
        });
  const reasons = d3.rollup(loud, (v) => v, (q) => q.reason);
  for (const [reason, quotes] of [...reasons].slice(0, 6)) {
    const few = quotes.slice(0, 3)
                    .map((q) => q.expiry ? contractName(q) + ' of ' + q.expiry.label : place(q))
                    .join('; ');
    look(
        counted(quotes.length, 'quote') + ' dropped as ' + reasonWord(reason) + ': ' + few +
            (quotes.length > 3 ? ' and others' : '') + '.',
        () => {
          ledgerWanted.reason = reason;
          updateLedger();
          goTo('ledger');
        });
  }
  if (!list.length)
    look(
        'Nothing: every used quote is met, no arbitrage was found, nothing was carried.', null,
        true);
  return list;
}

// A slip an expiry, with its smile in small; arrow keys walk them.
function expiryRail() {
  const slips = page.expiries.map((e) => {
    const tags = [],
          arbitrage =
              page.violations.filter((v) => v.legs.some((leg) => leg.expiry === e.place)).length;
    const {dropped, noBid} = countStates(e);
    if (e.carried || (e.forward && e.forward.source === 'carried'))
      tags.push(el('span', {class: 'tag-carry'}, '\u25cc carried'));
    if (arbitrage)
      tags.push(el(
          'span', {class: 'tag-arb', title: 'arbitrages with a leg here'}, '\u25a1 ' + arbitrage));
    if (dropped)
      tags.push(
          el('span', {
            class: 'tag-drop',
            title: 'dropped quotes' + (noBid ? ', ' + noBid + ' of them without a bid' : '')
          },
             '\u2715 ' + dropped));
    return el(
        'button', {
          type: 'button',
          role: 'tab',
          class: 'slip' + (e.fit ? '' : ' none'),
          tabindex: '-1',
          'aria-selected': 'false',
          'aria-controls': 'smile',
          onclick: () => choose(e)
        },
        el('strong', {}, e.label),
        el('span', {class: 'hint'},
           e.t > 0 ? days(e.t) + ' days' + (e.fit ? ' \u00b7 ' + vol(e.fit.atm, 1) : '') :
                     'expired'),
        smallSmile(e), el('span', {class: 'tags'}, tags));
  });
  const rail =
      el('div', {
        class: 'rail-of-expiries',
        role: 'tablist',
        'aria-label': 'Expiries',
        onkeydown: (event) => {
          const step = {ArrowRight: 1, ArrowDown: 1, ArrowLeft: -1, ArrowUp: -1}[event.key];
          if (!step) return;
          event.preventDefault();
          const to = Math.max(0, Math.min(slips.length - 1, chosen.expiry.place + step));
          choose(page.expiries[to]);
          slips[to].focus();
        }
      },
         slips);
  onChoose(() => slips.forEach((slip, i) => {
    const on = page.expiries[i] === chosen.expiry;
    slip.setAttribute('aria-selected', on);
    slip.tabIndex = on ? 0 : -1;
    // Into sight within its rail, without moving the page.
    if (on &&
        slip.offsetTop + slip.offsetHeight > rail.offsetTop + rail.scrollTop + rail.clientHeight) {
      rail.scrollTop = slip.offsetTop - rail.offsetTop - rail.clientHeight / 2;
    }
  }));
  return rail;
}
function smallSmile(e) {
  if (!e.fit) return el('span', {class: 'hint'}, 'no surface here');
  const x = d3.scaleLinear(d3.extent(e.fit.k), [0, 100]),
        y = d3.scaleLinear(d3.extent(e.fit.vol), [30, 4]);
  return el(
      'svg', {viewBox: '0 0 100 34', preserveAspectRatio: 'none', 'aria-hidden': 'true'},
      el('path', {d: d3.line().x((k) => x(k)).y((_, i) => y(e.fit.vol[i]))(e.fit.k)}));
}

function head() {
  const link = (file, text) => file ? el('a', {href: encodeURIComponent(file)}, text) : null;
  return el(
      'header', {class: 'horizon'},
      el('div', {class: 'inner'},
         el('p', {class: 'wordmark'}, el('a', {href: 'index.html'}, 'duskgrid'),
            el('span', {}, 'night of ' + longDate(page.as_of))),
         el('h1', {}, foreign(page.name)),
         el('p', {class: 'asof'}, 'quotes of ' + clockOf(page.as_of, page.zone)), themeSwitch(),
         el('div', {class: 'side'}, statusBadge(page.status),
            el('nav', {'aria-label': 'Other underlyings'}, link(page.before, '\u2190 worse'),
               page.before ? ' \u00a0 ' : '', el('a', {href: 'index.html'}, 'the whole night'),
               page.after ? ' \u00a0 ' : '', link(page.after, 'better \u2192')))));
}

const ORIGINS = {
  given: 'given',
  rows: 'read off its rows',
  inferred: 'inferred from parity',
  near: 'of the nearest expiry',
  assumed: 'assumed, nothing says'
};
// A number and where it comes from, told apart by a mark as well as by words.
function originated(text, origin) {
  return text === '' ?
      '\u2013' :
      el('span', {}, text, ' ',
         el('small', {},
            (origin === 'given' ? '\u25a0 ' : '\u25a1 ') + (ORIGINS[origin] || origin)));
}
function facts() {
  const rows = page.expiries.filter((e) => e.financing).map((e) => {
    const f = e.financing;
    return [
      e.label, isNumber(f.spot) ? originated(price(f.spot), f.spotOrigin) : 'none',
      originated(vol(f.rate, 3), f.rateOrigin),
      f.dividends ?
          el('span', {},
             counted(f.dividends, 'dividend') + ', ' + signed(f.effect, 3) + ' on the forward ',
             el('small', {}, '\u25a0 given')) :
          'none',
      originated(vol(f.borrow, 3), f.borrowOrigin), f.exercise.replace(/-/g, ' ')
    ];
  });
  const stated = page.facts.map(([label, value, origin]) => [label, foreign(value), origin]);
  return section(
      'facts', 'Given and inferred',
      'What carries the spot to each expiry: \u25a0 stated, \u25a1 worked out. Rate and borrow continuous, a year; borrow is what remains on top of the dividends.',
      stated.length ? plainTable(['stated', 'value', 'where from'], stated) : null,
      rows.length ?
          plainTable(
              ['expiry', 'spot', 'zero rate', 'dividends', 'borrow', 'exercise taken as'], rows) :
          null);
}

function build() {
  const main = el('main', {});
  main.append(verdict());
  if (page.expiries.length)
    main.append(section('smile', 'Expiries', null, expiryRail(), smilePanel()));
  if (page.fitted.length) {
    const term = termFigure(), heatMap = heatFigure();
    themeWatchers.push(() => heatMap.redraw());
    main.append(
        heatMap.node, el('div', {class: 'even'}, term.node, varianceFigure().node),
        el('div', {class: 'even'}, densityFigure().node, forwardFigure().node));
  } else if (page.expiries.some((e) => e.forward)) {
    main.append(forwardFigure().node);
  }
  main.append(changesSection(), violationSection());
  if (page.expiries.some((e) => e.forward)) main.append(forwardsTable());
  main.append(ledgerSection(), facts());
  document.body.append(head(), main, spoken);
  // The expiry to begin with: the one with most to look at.
  const trouble = (e) => 2 * page.carriedExpiries.includes(e) +
      3 * page.violations.filter((v) => v.expiry === e.place).length +
      e.quotes.filter((q) => q.state === 'dropped' && reasonWord(q.reason) !== 'no-bid').length +
      (e.fit ? 0.5 : 0);
  const first =
      page.expiries.filter((e) => e.fit).sort((a, b) => trouble(b) - trouble(a) || a.t - b.t)[0];
  choose(first || page.expiries.find((e) => e.fit) || page.expiries[0] || null);
}
build();
document.documentElement.dataset.ready = 'yes';
