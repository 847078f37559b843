"""What comes of each file of the corpus: the whole table of outcomes.

Most files hold the same table of six closes in another dialect; `whole` says that they read as that table. The files
are invented.
"""

# ruff: noqa: E501  one file, one line, so that the table can be read

from __future__ import annotations

import math
from collections.abc import Mapping, Sequence
from dataclasses import dataclass, field
from typing import Any

NAN = math.nan
SIX_DAYS = ("2020-01-10", "2020-01-13", "2020-01-14", "2020-01-15", "2020-01-16", "2020-01-17")
SIX_CLOSES = (1234.5, 1240.25, 1238.0, 1251.75, 1249.5, 1260.0)


@dataclass(frozen=True, kw_only=True)
class Outcome:
    """What comes of loading a file as `kind`, when `asked` is said about it.

    Either the days and values it gives, and how it says that it was read; or the problems: code, line, column.
    Files of another kind than prices are loaded beside prices of 1 on the six days, and only their columns are given,
    on the first three days.
    """

    file: str
    kind: str = "prices"
    asked: Mapping[str, Any] = field(default_factory=dict)
    days: Sequence[str] | None = None
    values: Mapping[str, Sequence[float]] | None = None
    text: str = "UTF-8, columns separated by commas, decimal point"
    dates: str = "YYYY-MM-DD"
    columns: str | None = None
    not_used: str | None = None
    left_out: str | None = None
    repair: str | None = None
    problems: Sequence[tuple[str, int | None, str | None]] = ()


def good(file: str, **what: Any) -> Outcome:
    """A file that gives these values."""
    return Outcome(file=file, **what)


def whole(file: str, **how: Any) -> Outcome:
    """A file that gives the six closes."""
    return Outcome(file=file, days=SIX_DAYS, values={"close": SIX_CLOSES}, **how)


def refused(file: str, problems: Sequence[tuple[str, int | None, str | None]], **what: Any) -> Outcome:
    """A file with these problems, in this order, and no others."""
    return Outcome(file=file, problems=problems, **what)


OUTCOMES = [
    # ---------------- what stands between columns, decimal marks, thousands
    whole('comma.csv'),
    whole('semicolon_decimal_comma.csv', text="UTF-8, columns separated by semicolons, decimal comma (settled by '1234,5')"),
    whole('semicolon_decimal_point.csv', text="UTF-8, columns separated by semicolons, decimal point (settled by '1234.5')"),
    whole('tab_decimal_point.tsv', text="UTF-8, columns separated by tabs, decimal point (settled by '1234.5')"),
    whole('tab_decimal_comma.tsv', text="UTF-8, columns separated by tabs, decimal comma (settled by '1234,5')"),
    whole('vertical_bar.txt', text="UTF-8, columns separated by vertical bars, decimal point (settled by '1234.5')"),
    whole('comma_quoted_decimal_comma.csv', text="UTF-8, columns separated by commas, decimal comma (settled by '1234,5')"),
    whole('thousands_comma.csv', text='UTF-8, columns separated by commas, decimal point, comma between thousands'),
    whole('thousands_point.csv', text="UTF-8, columns separated by semicolons, decimal comma (settled by '1.234,5'), point between thousands"),
    whole('thousands_space.csv', text="UTF-8, columns separated by semicolons, decimal comma (settled by '1 234,5'), space between thousands"),
    whole('thousands_no_break_space.csv', text="Windows-1252, columns separated by semicolons, decimal comma (settled by '1\xa0234,5'), no-break space between thousands"),
    whole('thousands_narrow_space.csv', text="UTF-8, columns separated by semicolons, decimal comma (settled by '1\u202f234,5'), narrow no-break space between thousands"),
    whole('thousands_thin_space.csv', text="UTF-8, columns separated by semicolons, decimal point (settled by '1\u2009234.5'), thin space between thousands"),
    whole('thousands_apostrophe.csv', text='UTF-8, columns separated by commas, decimal point, apostrophe between thousands'),
    whole('thousands_curly_apostrophe.csv', text='UTF-8, columns separated by commas, decimal point, apostrophe between thousands'),
    # ---------------- encodings and line ends
    whole('byte_order_mark.csv', text='UTF-8 with a byte order mark, columns separated by commas, decimal point'),
    whole('utf16_little.csv', text="UTF-16 (little-endian), columns separated by tabs, decimal point (settled by '1234.5')"),
    whole('utf16_big.csv', text="UTF-16 (big-endian), columns separated by tabs, decimal point (settled by '1234.5')"),
    whole('utf16_little_unmarked.csv', text="UTF-16 (little-endian), columns separated by tabs, decimal point (settled by '1234.5')"),
    whole('utf16_big_unmarked.csv', text="UTF-16 (big-endian), columns separated by semicolons, decimal point (settled by '1234.5')"),
    whole('utf32.csv', text='UTF-32 (little-endian), columns separated by commas, decimal point'),
    whole('windows_1252.csv', text="Windows-1252, columns separated by semicolons, decimal point (settled by '1234.5')", not_used="'Währung'"),
    whole('latin_1_pounds.csv', text='Windows-1252, columns separated by commas, decimal point'),
    whole('crlf.csv'),
    whole('cr.csv'),
    whole('mixed_line_ends.csv'),
    whole('all_quoted.csv'),
    whole('header_over_two_lines.csv', not_used="'Remark\\nof the day'"),
    whole('spaces.csv', columns="date from 'Date ', close from ' Close'"),
    whole('no_last_line_end.csv'),
    whole('old_end_of_file.csv'),
    # ---------------- lines above, between and below; rows
    whole('titles_above.csv', left_out="3 lines above the header ('Closing prices of an index', 'Source: made up; in points, not adjusted', 'As of 17/01/2020, 18:00')"),
    whole('comments_above.csv', left_out="2 lines above the header ('# made up', '# one row a day')"),
    whole('commented_header.csv'),
    whole('separator_line.csv', text="UTF-8, columns separated by semicolons, decimal comma (settled by '1234,5')", left_out="1 line above the header ('sep=;')"),
    whole('notes_below.csv', left_out='3 lines below the last row (\'* closing prices in points\', \'"Data may be late, wrong, or both"\', \'Source: nobody\'), 1 blank row'),
    whole('totals_below.csv', left_out="2 lines below the last row ('Average 1245.67', 'Total 7474.0')"),
    whole('blank_rows.csv', left_out='5 blank rows'),
    whole('comments_between.csv', left_out="2 lines of comment ('#2020-01-14 1', '# a quiet day')"),
    whole('header_again.csv', left_out='1 repeated header'),
    whole('separator_at_ends.csv'),
    whole('separator_at_ends_of_rows.csv'),
    whole('newest_first.csv', repair='rows were newest first; sorted by date, oldest first'),
    whole('out_of_order.csv', repair='rows were out of order; sorted by date, oldest first'),
    good('names_on_three_lines.csv', days=SIX_DAYS, values={'close': SIX_CLOSES, 'volume': [10.0, 11.0, 12.0, 13.0, 14.0, 15.0]}, left_out="2 lines above the header ('Price,Close,Volume', 'Ticker,MADE-UP,MADE-UP')", columns="date from 'Date', close from 'Close', volume from 'Volume'"),
    whole('date_without_name.csv', columns="date from '', close from 'Close'"),
    whole('row_numbers.csv'),
    whole('adjusted_beside.csv', not_used="'Adj Close' (adjusted for splits or dividends; prices are those traded), 'Adj. Open' (adjusted for splits or dividends; prices are those traded)"),
    good('adjusted_beside.csv', asked={'columns': ['close=Adj Close']}, days=SIX_DAYS, values={'close': [617.25, 617.25, 617.25, 617.25, 617.25, 617.25]}, not_used="'Close', 'Adj. Open' (adjusted for splits or dividends; prices are those traded)", columns="date from 'Date', close from 'Adj Close'"),
    # ---------------- dates
    whole('day_first.csv', dates="DD/MM/YYYY, settled by '13/01/2020'"),
    whole('month_first.csv', dates="MM/DD/YYYY, settled by '01/13/2020'"),
    whole('day_first_points.csv', text="UTF-8, columns separated by semicolons, decimal point (settled by '1234.5')", dates="DD.MM.YYYY, settled by '13.01.2020'"),
    whole('month_first_dashes.csv', dates="MM-DD-YYYY, settled by '01-13-2020'"),
    whole('day_first_one_digit.csv', dates="DD/MM/YYYY, settled by '13/1/2020'"),
    refused('day_first_two_digit_year.csv', problems=[('date-form-unclear', 2, 'Date')]),
    whole('day_first_two_digit_year.csv', asked={'date_formats': ['DD/MM/YY']}, dates='DD/MM/YY; years 69 to 99 as 1969 to 1999, 00 to 68 as 2000 to 2068'),
    whole('month_first_two_digit_year.csv', dates="MM/DD/YY, settled by '1/13/20'; years 69 to 99 as 1969 to 1999, 00 to 68 as 2000 to 2068"),
    good('year_first_two_digits.csv', days=['1995-12-29', '1996-01-31', '1996-02-29'], values={'close': [1.0, 2.0, 3.0]}, text='UTF-8, columns separated by commas', dates="YY-MM-DD, settled by '95-12-29'; years 69 to 99 as 1969 to 1999, 00 to 68 as 2000 to 2068"),
    whole('year_first_slashes.csv', dates='YYYY/MM/DD'),
    whole('year_first_one_digit.csv', dates='YYYY.MM.DD'),
    whole('month_name.csv', dates='DD-MON-YYYY'),
    whole('month_name_first.csv', dates='MON-DD-YYYY'),
    whole('month_name_capitals.csv', dates='DD-MON-YY; years 69 to 99 as 1969 to 1999, 00 to 68 as 2000 to 2068'),
    whole('month_name_long.csv', dates='DD-MON-YYYY'),
    whole('month_name_weekday.csv', dates='MON-DD-YYYY'),
    whole('month_name_ordinal.csv', dates='DD-MON-YYYY'),
    whole('month_name_together.csv', dates='DD-MON-YYYY'),
    good('month_name_sept.csv', days=['2019-08-30', '2019-09-30', '2019-10-31'], values={'close': [1.0, 2.0, 3.0]}, text='UTF-8, columns separated by commas', dates='DD-MON-YYYY'),
    whole('compact.csv', dates='YYYYMMDD'),
    whole('compact_as_number.csv', dates='YYYYMMDD'),
    refused('compact_day_first.csv', problems=[('bad-date', 2, 'Date'), ('bad-date', 3, 'Date'), ('bad-date', 4, 'Date'), ('bad-date', 5, 'Date'), ('bad-date', 6, 'Date'), ('bad-date', 7, 'Date')]),
    whole('compact_day_first.csv', asked={'date_formats': ['ddmmyyyy']}, dates='DDMMYYYY'),
    whole('timestamps.csv', dates='YYYY-MM-DD; the day as written; times and zones not used'),
    whole('timestamps_midnight.csv'),
    whole('timestamps_zone.csv', dates='YYYY-MM-DD; the day as written; times and zones not used'),
    whole('timestamps_utc.csv', dates='YYYY-MM-DD; the day as written; times and zones not used'),
    whole('timestamps_afternoon.csv', dates="MM/DD/YYYY, settled by '1/13/2020 4:00:00 PM'; the day as written; times and zones not used"),
    whole('serial.csv', dates='SERIAL'),
    whole('serial.csv', asked={'date_formats': ['serial']}, dates='SERIAL'),
    whole('serial_with_time.csv', dates='SERIAL'),
    refused('serial_1904.csv', problems=[('date-form-unclear', 2, 'Date')]),
    whole('serial_1904.csv', asked={'date_formats': ['SERIAL-1904']}, dates='SERIAL-1904'),
    refused('serial_leap_bug.csv', problems=[('bad-date', 2, 'Date'), ('bad-date', 3, 'Date'), ('bad-date', 4, 'Date')]),
    refused('serial_leap_bug.csv', asked={'date_formats': ['SERIAL']}, problems=[('bad-date', 3, 'Date')]),
    refused('serial_first_days.csv', problems=[('bad-date', 2, 'Date'), ('bad-date', 3, 'Date'), ('bad-date', 4, 'Date')]),
    good('serial_first_days.csv', asked={'date_formats': ['SERIAL']}, days=['1900-01-01', '1900-02-28', '1900-03-01'], values={'close': [1.0, 2.0, 3.0]}, text='UTF-8, columns separated by commas', dates='SERIAL'),
    refused('day_or_month.csv', problems=[('date-form-unclear', 2, 'Date')]),
    good('day_or_month.csv', asked={'date_formats': ['DD/MM/YYYY']}, days=['2020-02-03', '2020-02-04', '2020-02-05'], values={'close': [1.0, 2.0, 3.0]}, text='UTF-8, columns separated by commas', dates='DD/MM/YYYY'),
    good('day_or_month.csv', asked={'date_formats': ['%m/%d/%Y']}, days=['2020-03-02', '2020-04-02', '2020-05-02'], values={'close': [1.0, 2.0, 3.0]}, text='UTF-8, columns separated by commas', dates='MM/DD/YYYY'),
    good('day_or_month_same.csv', days=['2020-01-01', '2020-02-02'], values={'close': [1.0, 2.0]}, text='UTF-8, columns separated by commas', dates='DD/MM/YYYY'),
    refused('day_and_month_contradict.csv', problems=[('date-forms-mixed', 2, 'Date')]),
    refused('day_and_month_contradict.csv', asked={'date_formats': ['DD/MM/YYYY']}, problems=[('bad-date', 3, 'Date')]),
    refused('one_day_too_many.csv', problems=[('bad-date', 4, 'Date')]),
    refused('forms_mixed.csv', problems=[('bad-date', 5, 'Date')]),
    refused('two_digit_years_to_come.csv', problems=[('two-digit-year', 2, 'Date'), ('two-digit-year', 3, 'Date')]),
    refused('february_29.csv', problems=[('bad-date', 3, 'Date')]),
    refused('not_a_month.csv', problems=[('bad-date', 3, 'Date')]),
    refused('quarters.csv', problems=[('bad-date', 2, 'Date'), ('bad-date', 3, 'Date')]),
    refused('time_of_day_in_a_date.csv', problems=[('bad-date', 5, 'Date')]),
    # ---------------- numbers that could be two, and signs
    refused('decimal_or_thousands.tsv', problems=[('decimal-unclear', 2, 'Close')]),
    good('decimal_or_thousands.tsv', asked={'decimals': ['comma']}, days=['2020-01-10', '2020-01-13'], values={'close': [1.234, 1.24]}, text='UTF-8, columns separated by tabs, decimal comma'),
    good('decimal_or_thousands.tsv', asked={'decimals': ['point']}, days=['2020-01-10', '2020-01-13'], values={'close': [1234.0, 1240.0]}, text='UTF-8, columns separated by tabs, decimal point, comma between thousands'),
    refused('decimal_or_thousands_points.csv', problems=[('decimal-unclear', 2, 'Close')]),
    good('decimal_or_thousands_points.csv', asked={'decimals': ['prices=comma', 'point']}, days=['2020-01-10', '2020-01-13'], values={'close': [1234.0, 1240.0]}, text='UTF-8, columns separated by semicolons, decimal comma, point between thousands'),
    refused('decimal_or_thousands_quoted.csv', problems=[('decimal-unclear', 2, 'Close')]),
    good('decimal_or_thousands_quoted.csv', asked={'decimals': ['point']}, days=['2020-01-10', '2020-01-13'], values={'close': [1234.0, 1240.0]}, text='UTF-8, columns separated by commas, decimal point, comma between thousands'),
    good('thousands_twice.csv', days=['2020-01-10', '2020-01-13'], values={'close': [1234.0, 1240.0], 'volume': [1234567.0, 2000001.0]}, text='UTF-8, columns separated by commas, decimal point, comma between thousands', columns="date from 'Date', close from 'Close', volume from 'Volume'"),
    refused('three_decimals_in_quotes.csv', problems=[('decimal-unclear', 2, 'Close')]),
    refused('three_decimals_or_thousands.csv', problems=[('decimal-unclear', 3, 'Close')]),
    good('three_decimals.csv', days=['2020-01-10', '2020-01-13'], values={'close': [1.234, 1.24]}),
    refused('decimal_marks_mixed.csv', problems=[('not-a-number', 3, 'Close')]),
    refused('thousands_mixed.csv', problems=[('thousands-mixed', 3, 'Volume')]),
    refused('thousands_wrong.csv', problems=[('not-a-number', 2, 'Close')]),
    whole('dollars.csv'),
    whole('euros_after.csv', text="UTF-8, columns separated by semicolons, decimal comma (settled by '1234,5 €')"),
    refused('monies_mixed.csv', problems=[('currency-mixed', 3, 'Close')]),
    good('percent_vol.csv', values={'vol': [0.125, 0.13, 1.5019]}, kind='vol', columns="date from 'Date', vol from 'Vol'"),
    refused('percent_vol.csv', asked={'vol_unit': 'decimal'}, kind='vol', problems=[('percent-unit', None, None)]),
    refused('percent_vol_mixed.csv', kind='vol', problems=[('percent-mixed', 4, 'Vol'), ('vol-outlier', 4, 'Vol')]),
    good('percent_rates.csv', values={'rate': [0.015, -0.0005, -0.0005]}, kind='rates', columns="date from 'Date', rate from 'Rate'"),
    refused('percent_prices.csv', problems=[('not-a-number', 2, 'Close')]),
    good('missing_of_all_sorts.csv', days=[f'2020-01-{day}' for day in range(10, 26)], values={'close': [1.0] * 16, 'open': [NAN] * 16}, text='UTF-8, columns separated by commas', columns="date from 'Date', close from 'Close', open from 'Open'"),
    refused('spreadsheet_fault.csv', problems=[('not-a-number', 2, 'Open')]),
    good('minus_signs.csv', values={'rate': [-0.005, -0.0025, 0.015]}, kind='rates', columns="date from 'Date', rate from 'Rate'"),
    good('exponents.csv', days=['2020-01-10', '2020-01-13'], values={'close': [1234.5, 1240.25], 'volume': [1000000.0, 2000000.0]}, columns="date from 'Date', close from 'Close', volume from 'Volume'"),
    refused('missing_close.csv', problems=[('missing-price', 3, 'Close')]),
    # ---------------- headers
    refused('german_names.csv', problems=[('missing-column', 1, None), ('missing-column', 1, None)]),
    good('german_names.csv', asked={'columns': ['date=Datum', 'close=Schlußkurs', 'open=eröffnung']}, days=SIX_DAYS, values={'close': SIX_CLOSES, 'open': SIX_CLOSES}, text="UTF-8, columns separated by semicolons, decimal comma (settled by '1234,5')", dates="DD.MM.YYYY, settled by '13.01.2020'", columns="date from 'Datum', close from 'Schlußkurs', open from 'Eröffnung'"),
    refused('german_names.csv', asked={'columns': ['date=Datum', 'close=Schluss']}, problems=[('unknown-column', 1, None)]),
    refused('tenor_names.csv', kind='vol', problems=[('missing-column', 1, None), ('missing-column', 1, None)]),
    good('tenor_names.csv', asked={'columns': ['vol.date=Tag', 'vol.93=3M', 'vol.vol_30=1M']}, values={'vol_30': [0.12, 0.12, 0.12], 'vol_93': [0.13, 0.13, 0.13]}, kind='vol', text='UTF-8, columns separated by semicolons', columns="date from 'Tag', vol_30 from '1M', vol_93 from '3M'"),
    refused('no_header.csv', problems=[('no-header', 1, None)]),
    refused('one_column.csv', problems=[('no-separator', 1, None)]),
    refused('row_above_header.csv', problems=[('rows-above-header', 1, None)]),
    refused('two_closes.csv', problems=[('ambiguous-column', 1, None)]),
    good('two_closes.csv', asked={'columns': ['close=Settle']}, days=['2020-01-10'], values={'close': [2.0]}, text='UTF-8, columns separated by commas', not_used="'Last'", columns="date from 'Date', close from 'Settle'"),
    # ---------------- rows that are none
    refused('ragged.csv', problems=[('ragged-row', 4, None)]),
    refused('cut_off.csv', problems=[('ragged-row', 8, None)]),
    refused('total_without_word.csv', problems=[('bad-date', 8, 'Date')]),
    refused('word_for_a_date.csv', problems=[('bad-date', 8, 'Date')]),
    refused('quote_not_closed.csv', problems=[('unclosed-quote', 4, None)]),
    refused('rows_in_quotes.csv', problems=[('rows-in-quotes', 2, 'Note')]),
    refused('note_in_quotes.csv', problems=[('not-a-number', 5, 'Close')]),
    refused('second_table_below.csv', problems=[('bad-date', 9, 'Date')]),
    refused('duplicate.csv', problems=[('duplicate-date', 8, 'Date')]),
    refused('empty.csv', problems=[('empty-file', None, None)]),
    refused('only_header.csv', problems=[('no-rows', None, None)]),
    refused('only_titles.csv', problems=[('no-separator', 1, None)]),
    # ---------------- bytes, packed files
    refused('zero_bytes.csv', problems=[('binary-file', None, None)]),
    refused('broken_utf8.csv', problems=[('not-utf-8', 5, None)]),
    refused('broken_utf16.csv', problems=[('damaged-text', 7, None)]),
    refused('not_windows_1252.csv', problems=[('not-utf-8', 1, None)]),
    refused('document.csv', problems=[('binary-file', None, None)]),
    whole('gzip.csv.gz', text='packed with gzip, UTF-8, columns separated by commas, decimal point'),
    whole('gzip_two_parts.csv.gz', text='packed with gzip, UTF-8, columns separated by commas, decimal point'),
    refused('gzip_cut_off.csv.gz', problems=[('damaged-file', None, None)]),
    refused('gzip_damaged.csv.gz', problems=[('damaged-file', None, None)]),
    refused('gzip_in_gzip.csv.gz', problems=[('binary-file', None, None)]),
    whole('gzip_wrong_name.csv', text='packed with gzip, UTF-8, columns separated by commas, decimal point'),
    whole('bzip2.csv.bz2', text='packed with bzip2, UTF-8, columns separated by commas, decimal point'),
    whole('xz.csv.xz', text='packed with xz, UTF-8, columns separated by commas, decimal point'),
    whole('zstd.csv.zst', text='packed with zstd, UTF-8, columns separated by commas, decimal point'),
    whole('zip.zip', text='packed with zip, UTF-8, columns separated by commas, decimal point'),
    whole('zip_of_a_mac.zip', text='packed with zip, UTF-8, columns separated by commas, decimal point'),
    refused('zip_of_two.zip', problems=[('many-members', None, None)]),
    refused('zip_of_none.zip', problems=[('many-members', None, None)]),
    refused('zip_locked.zip', problems=[('damaged-file', None, None)]),
    refused('zip_cut_off.zip', problems=[('damaged-file', None, None)]),
    refused('workbook.xlsx', problems=[('binary-file', None, None)]),
    # ---------------- Parquet
    whole('dates.parquet', text='Parquet', not_used="'adj_close' (adjusted for splits or dividends; prices are those traded)"),
    whole('timestamps_zone.parquet', text='Parquet', columns="date from 'timestamp', close"),
    whole('text.parquet', text="Parquet, decimal comma (settled by '1234,5')", dates="DD/MM/YYYY, settled by '13/01/2020'"),
    good('integers.parquet', days=SIX_DAYS, values={'close': [1234.0, 1240.0, 1238.0, 1251.0, 1249.0, 1260.0], 'volume': [10.0, NAN, 12.0, 13.0, 14.0, 15.0]}, text='Parquet', dates='YYYYMMDD', columns="date from 'Date', close from 'Close', volume from 'Volume'"),
    whole('decimals.parquet', text='Parquet'),
    whole('unnamed_index.parquet', text='Parquet', columns="date from '__index_level_0__', close"),
    refused('bad_values.parquet', problems=[('not-positive', 2, 'close'), ('not-finite', 3, 'close'), ('missing-price', 4, 'close')]),
    refused('nested.parquet', problems=[('column-type', None, 'close')]),
    refused('duplicate.parquet', problems=[('duplicate-date', 3, 'date')]),
    refused('no_rows.parquet', problems=[('no-rows', None, None)]),
    refused('cut_off.parquet', problems=[('damaged-file', None, None)]),
    # ---------------- many symbols
    refused('long.csv', problems=[('many-symbols', None, 'symbol')]),
    good('long.csv', asked={'symbol': 'AAA'}, days=['2020-01-10', '2020-01-13', '2020-01-14'], values={'close': [1.0, 2.0, 3.0]}, text='UTF-8, columns separated by commas', columns="date, close, symbol from 'symbol'"),
    good('long.csv', asked={'symbol': '../BBB', 'symbol_column': 'Symbol'}, days=['2020-01-10', '2020-01-13', '2020-01-14'], values={'close': [10.0, 20.0, 30.0]}, text='UTF-8, columns separated by commas', columns="date, close, symbol from 'symbol'"),
    refused('long.csv', asked={'symbol': 'AA'}, problems=[('unknown-symbol', None, 'symbol')]),
    refused('long_without_symbol.csv', problems=[('many-symbols', None, 'symbol')]),
    refused('long_bad.csv', problems=[('many-symbols', None, 'symbol')]),
    refused('long_bad.csv', asked={'symbol': 'AAA'}, problems=[('not-a-number', 6, 'close')]),
    good('long_bad.csv', asked={'symbol': '../BBB'}, days=['2020-01-10', '2020-01-13', '2020-01-14'], values={'close': [10.0, 20.0, 30.0]}, text='UTF-8, columns separated by commas', columns="date, close, symbol from 'symbol'"),
    refused('long_other_name.csv', problems=[('duplicate-date', 3, 'date'), ('duplicate-date', 5, 'date'), ('duplicate-date', 7, 'date')]),
    refused('long_other_name.csv', asked={'symbol': 'AAA'}, problems=[('no-symbol-column', None, None)]),
    good('long_other_name.csv', asked={'symbol': 'AAA', 'symbol_column': 'asset'}, days=['2020-01-10', '2020-01-13', '2020-01-14'], values={'close': [1.0, 2.0, 3.0]}, text='UTF-8, columns separated by commas', columns="date, close, symbol from 'asset'"),
    refused('long_other_name.csv', asked={'symbol': 'AAA', 'symbol_column': 'ticker'}, problems=[('no-symbol-column', None, None)]),
]  # fmt: skip
