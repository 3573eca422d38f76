// The night: index.html.

const night = readData();
const KEYS = [
  'name', 'status', 'certified', 'slices', 'used', 'inside', 'violations', 'miss', 'carried',
  'flaggedChanges', 'change', 'message', 'from', 'counts', 'page'
];
const lines = night.underlyings.map((row, at) => {
  const line = Object.fromEntries(KEYS.map((key, i) => [key, row[i]]));
  line.at = at;
  line.by = tally(line.counts);
  line.words = (line.name + ' ' + line.message).toLowerCase();
  line.href = line.page === 0 ?
      null :
      encodeURIComponent(line.page === 1 ? line.name + '.html' : line.page);
  return line;
});

// What is shown: a line has to pass all of these.
const wanted = {
  text: '',
  statuses: new Set(),
  reason: null,
  only: new Set()
};
const ONLY = [
  [
    'violations', 'arbitrage', 'with arbitrage among quotes or in the surface',
    (l) => l.violations > 0
  ],
  ['missed', 'quotes missed', 'with used quotes outside their spreads', (l) => l.used > l.inside],
  [
    'changed', 'moves to sign off', 'with nodes to sign off since the night before',
    (l) => l.flaggedChanges > 0
  ],
  [
    'carried', 'carried', 'with expiries or surfaces of an earlier night',
    (l) => l.carried > 0 || l.status === 2
  ],
];
function passes(line) {
  return (wanted.statuses.size === 0 || wanted.statuses.has(line.status)) &&
      (wanted.text === '' || line.words.includes(wanted.text)) &&
      (wanted.reason === null || line.by.reasons.has(wanted.reason)) &&
      ONLY.every(([key, , , test]) => !wanted.only.has(key) || test(line));
}

const columns = [
  {
    head: 'underlying',
    width: 'minmax(7rem, 1.1fr)',
    sort: (l) => l.name,
    narrow: 'first',
    cell: (l) =>
        [statusMark(l.status),
         l.href ? el('a', {href: l.href, tabindex: '-1'}, foreign(l.name)) : foreign(l.name)]
  },
  {
    head: 'status',
    width: '5.4rem',
    sort: (l) => l.status,
    down: true,
    narrow: 'away',
    cell: (l) => STATUSES[l.status].word
  },
  {
    head: 'what to look at',
    width: 'minmax(9rem, 4fr)',
    sort: (l) => l.message,
    narrow: 'second',
    cell: (l) => el('span', {class: 'clip', title: l.message}, l.message || '\u2013')
  },
  {
    head: 'expiries',
    width: '3.9rem',
    number: true,
    sort: (l) => l.slices,
    down: true,
    narrow: 'away',
    cell: (l) => count(l.slices)
  },
  {
    head: 'used',
    width: '3.6rem',
    number: true,
    sort: (l) => l.used,
    down: true,
    narrow: 'away',
    cell: (l) => count(l.used)
  },
  {
    head: 'inside',
    width: '4.2rem',
    number: true,
    sort: (l) => l.used ? l.inside / l.used : null,
    narrow: 'third',
    cell: (l) => share(l.inside, l.used)
  },
  {
    head: 'worst miss',
    width: '5rem',
    number: true,
    sort: (l) => l.used ? Math.abs(l.miss) : null,
    down: true,
    narrow: 'away',
    cell: (l) =>
        l.used ? el('span', {title: 'half-spreads outside bid and ask'}, signed(l.miss, 1)) : ''
  },
  {
    head: 'dropped',
    width: '4.2rem',
    number: true,
    sort: (l) => l.by.dropped,
    down: true,
    narrow: 'away',
    cell: (l) => count(l.by.dropped)
  },
  {
    head: 'arbitrage',
    width: '4.4rem',
    number: true,
    sort: (l) => l.violations,
    down: true,
    narrow: 'away',
    cell: (l) => count(l.violations)
  },
  {
    head: 'change',
    width: '4rem',
    number: true,
    sort: (l) => isNumber(l.change) ? Math.abs(l.change) : null,
    down: true,
    narrow: 'away',
    cell: (l) =>
        el('span', {title: 'largest move of the surface since the night before, vol points'},
           points(l.change))
  },
  {
    head: 'proved',
    width: '3.4rem',
    sort: (l) => l.slices ? l.certified : null,
    narrow: 'away',
    cell: (l) => l.slices ? (l.certified ? 'yes' : 'no') : ''
  },
];

// A night without an earlier one has no changes to show.
const changeColumn = columns.find((c) => c.head === 'change');
const shownColumns =
    columns.filter((c) => c !== changeColumn || lines.some((l) => isNumber(l.change)));

let table, shownText, field;
// Who to look at first, in full.
function worst() {
  const list = lines.filter((l) => l.status > 0 || l.flaggedChanges > 0).slice(0, 5);
  return el(
      'ol', {class: 'worst'},
      list.map(
          (l) =>
              el('li', {}, statusMark(l.status),
                 el('div', {}, l.href ? el('a', {href: l.href}, foreign(l.name)) : foreign(l.name),
                    ' ',
                    el('span', {},
                       l.message || counted(l.flaggedChanges, 'node') + ' to sign off')))));
}

function update() {
  const rows = lines.filter(passes);
  table.node.style.setProperty('--lines', Math.max(3, Math.min(18, rows.length)));
  table.show(rows);
  shownText.textContent = rows.length === lines.length ?
      'all ' + count(rows.length) :
      count(rows.length) + ' of ' + count(lines.length);
  document.querySelectorAll('[data-status]')
      .forEach(
          (b) => b.setAttribute('aria-pressed', wanted.statuses.has(Number(b.dataset.status))));
  document.querySelectorAll('[data-reason]')
      .forEach(
          (b) => b.setAttribute(
              'aria-pressed',
              wanted.reason !== null && reasonWord(wanted.reason) === b.dataset.reason));
  if (field) field.soon();
}

function statusTiles() {
  const numbers = STATUSES.map((_, s) => lines.filter((l) => l.status === s).length);
  return el(
      'div', {class: 'tiles'},
      [3, 2, 1, 0].map(
          (s) =>
              el('button', {
                type: 'button',
                class: 'tile t' + s,
                'data-status': s,
                'aria-pressed': 'false',
                title: 'Show only these',
                onclick: () => {
                  wanted.statuses.has(s) ? wanted.statuses.delete(s) : wanted.statuses.add(s);
                  update();
                }
              },
                 statusMark(s), el('strong', {}, count(numbers[s])),
                 el('span', {}, STATUSES[s].word), el('small', {}, STATUSES[s].says))));
}

// One mark an underlying, worst first, as many as there are: the night in one look. The table below
// holds the same in words.
class Field {
  constructor() {
    this.canvas = el('canvas', {
      role: 'img',
      'aria-label': 'One mark an underlying, worst first; the table below says the same in words'
    });
    this.readout = el('p', {class: 'says'}, '\u00a0');
    this.node = el('div', {class: 'field'}, this.canvas, this.readout);
    this.canvas.addEventListener('pointermove', (event) => this.point(event));
    this.canvas.addEventListener('pointerleave', () => {
      this.readout.textContent = '\u00a0';
    });
    this.canvas.addEventListener('click', (event) => {
      const line = this.under(event);
      if (line && line.href) location.href = line.href;
    });
    new ResizeObserver(() => this.soon()).observe(this.node);
    themeWatchers.push(() => this.soon());
    this.shapes = SHAPES.map((d) => new Path2D(d));
  }
  // Once a frame, whatever asks.
  soon() {
    if (!this.asked) requestAnimationFrame(() => this.paint());
    this.asked = true;
  }
  layout() {
    const width = this.node.clientWidth || 600, n = Math.max(1, lines.length);
    const cell = Math.max(6, Math.min(26, Math.floor(Math.sqrt(width * 150 / n))));
    const across = Math.max(1, Math.floor(width / cell));
    return {width, cell, across, height: Math.ceil(n / across) * cell};
  }
  paint() {
    this.asked = false;
    const {width, cell, across, height} = this.layout(), ratio = devicePixelRatio || 1;
    const style = getComputedStyle(this.node);
    const shades = [0, 1, 2, 3].map((s) => style.getPropertyValue('--s' + s));
    this.canvas.width = width * ratio;
    this.canvas.height = height * ratio;
    this.canvas.style.height = height + 'px';
    const pen = this.canvas.getContext('2d');
    for (const line of lines) {
      const x = line.at % across * cell, y = Math.floor(line.at / across) * cell;
      const size = cell * (line.status === 0 ? 0.5 : 0.78) / 16, edge = (cell - 16 * size) / 2;
      pen.setTransform(ratio * size, 0, 0, ratio * size, ratio * (x + edge), ratio * (y + edge));
      pen.globalAlpha = passes(line) ? 1 : 0.15;
      pen.fillStyle = shades[line.status];
      pen.fill(this.shapes[line.status], 'evenodd');
    }
  }
  under(event) {
    const {cell, across} = this.layout(), box = this.canvas.getBoundingClientRect();
    const x = Math.floor((event.clientX - box.left) / cell),
          y = Math.floor((event.clientY - box.top) / cell);
    return x < across ? lines[y * across + x] : undefined;
  }
  point(event) {
    const line = this.under(event);
    this.readout.replaceChildren(
        ...(line ?
                [
                  foreign(line.name),
                  ': ' + STATUSES[line.status].word + (line.message ? ', ' + line.message : '')
                ] :
                ['\u00a0']));
  }
}

function contracts() {
  const by = tally(night.rows);
  const parts = ['used', 'spare', 'dropped'].map((state) => {
    const part = el('span', {class: 'part ' + state, title: count(by[state]) + ' ' + state});
    part.style.flexGrow = by[state];
    return part;
  });
  return section(
      'contracts', counted(by.read, 'contract') + ' read',
      count(by.used) + ' used, ' + count(by.spare) + ' spare, ' + count(by.dropped) +
          ' dropped. A reason shows the underlyings that have it.',
      el('div', {class: 'whole', 'aria-hidden': 'true'}, parts),
      reasonBars(
          by,
          (reason) => {
            wanted.reason = wanted.reason === reason ? null : reason;
            update();
          }),
      night.remarks.length ? el('div', {class: 'remarks'}, el('h3', {}, 'Remarks'),
                                el('ul', {}, night.remarks.map((r) => el('li', {}, foreign(r))))) :
                             null);
}

function filters() {
  const search = el('input', {
    type: 'search',
    id: 'search',
    placeholder: 'name or words of the message',
    'aria-label': 'Find an underlying',
    oninput: () => {
      wanted.text = search.value.trim().toLowerCase();
      update();
    }
  });
  shownText = el('output', {class: 'shown'});
  const usable = ONLY.filter(([, , , test]) => lines.some(test));
  return el(
      'div', {class: 'filters'}, search,
      usable.map(([key, text, title]) => toggle(text, false, (on) => {
                   on ? wanted.only.add(key) : wanted.only.delete(key);
                   update();
                 }, title)), shownText);
}

function inputs() {
  return section(
      'inputs', 'Read from', null,
      plainTable(
          ['file', '>rows', '>bytes', 'SHA-256'],
          night.inputs.map(
              ([
                file, rows, bytes, sum
              ]) => [foreign(file), count(rows), count(bytes), el('code', {class: 'sum'}, sum)])));
}

function signOff() {
  const line = (text) => el('div', {class: 'pen'}, el('span', {}, text));
  return section(
      'sign-off', 'Sign-off', 'Marks need independent validation; nothing here is advice to trade.',
      el('p', {}, 'Approve by the SHA-256 of run.json, which ', el('code', {}, 'duskgrid check'),
         ' prints: it stands for every file of the night, these pages among them.'),
      el('div', {class: 'pens'}, line('marked by'), line('looked at by'), line('date and time')));
}

document.body.append(
    el('a', {class: 'skip', href: '#underlyings'}, 'to the underlyings'),
    el('header', {class: 'horizon'},
       el('div', {class: 'inner'},
          el('p', {class: 'wordmark'}, 'duskgrid', el('span', {}, 'sign-off of a night')),
          el('h1', {}, longDate(night.as_of)),
          el('p', {class: 'asof'},
             'quotes of ' + clockOf(night.as_of, night.zone) + ' \u00b7 version ' + night.version),
          themeSwitch())),
    el('main', {},
       el('div', {class: 'two'},
          section(
              'night', counted(lines.length, 'underlying'), null, statusTiles(),
              (field = new Field()).node, worst()),
          contracts()),
       section(
           'underlyings', 'Underlyings, worst first',
           'Columns sort; arrow keys walk the rows and Enter opens one. Inside: used quotes whose spread the surface meets. Worst miss in half-spreads.' +
               (shownColumns.includes(changeColumn) ?
                    ' Change: the largest move of the surface since the night before, in vol points, of the nodes that the sign-off judges.' :
                    ''),
           filters(), (table = new LongTable({
                         id: 'u',
                         label: 'Underlyings',
                         class: 'night',
                         columns: shownColumns,
                         rows: lines,
                         empty: 'No underlying is like that.',
                         open: (l) => {
                           if (l.href) location.href = l.href;
                         }
                       })).node),
       inputs(), signOff()),
    spoken);
update();
document.documentElement.dataset.ready = 'yes';
